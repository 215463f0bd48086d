//! The tide line: a horizontal QTc scale with the protocol's limits as shores, the baseline as a notch, the value
//! as a mark as wide as its doubt.

use ebbmark_rules::alert::Tide;
use maud::{Markup, html};

const WIDTH: f64 = 640.0;
const HEIGHT: f64 = 110.0;
const MARGIN: f64 = 24.0;
/// Where the line itself lies.
const WATER: f64 = 56.0;

/// Draws one value (ms) with its limits, baseline and doubt. `caption` says in words what it shows, for a reader
/// who hears the page.
pub fn tide(tide: &Tide, caption: &str) -> Markup {
    let scale = Scale::around(tide);
    let doubt = tide.doubt.max(0.0);
    let (low, high) = (scale.x(tide.value - doubt), scale.x(tide.value + doubt));
    let width = (high - low).max(4.0);
    html! {
        svg xmlns="http://www.w3.org/2000/svg" viewBox=(format!("0 0 {WIDTH} {HEIGHT}")) role="img"
            class="tide" font-family="DejaVu Sans, sans-serif" font-size="12" fill="#000" {
            title { (caption) }
            rect width=(WIDTH) height=(HEIGHT) fill="#fff" {}
            @for (n, (limit, tier)) in tide.limits.iter().enumerate() {
                @let x = scale.x(*limit);
                // Each further shore is drawn heavier: weight, not colour, says how far inland the value lies.
                @let weight = 1.5 + 1.5 * n as f64;
                line x1=(px(x)) x2=(px(x)) y1=(WATER - 16.0) y2=(WATER + 16.0) stroke="#000" stroke-width=(weight) {}
                line x1=(px(x)) x2=(px(scale.right())) y1=(WATER + 8.0) y2=(WATER + 8.0)
                    stroke="#000" stroke-width=(weight) {}
                // In two rows, so that the names of neighbours don't run into each other.
                @let row = if n % 2 == 0 { 31.0 } else { 45.0 };
                text x=(px(x)) y=(px(WATER + row)) text-anchor="middle" {
                    (format!("{limit:.0} {}", tier.as_str()))
                }
            }
            line x1=(px(scale.x(scale.low))) x2=(px(scale.right())) y1=(WATER) y2=(WATER) stroke="#000" {}
            @for ms in scale.ticks() {
                line x1=(px(scale.x(ms))) x2=(px(scale.x(ms))) y1=(WATER - 4.0) y2=(WATER) stroke="#000" {}
            }
            @if let Some(baseline) = tide.baseline {
                @let x = scale.x(baseline);
                path d=(format!("M{0:.1} {1:.1}l-7 -12h14z", x, WATER)) fill="#fff" stroke="#000" stroke-width="1.5" {}
                text x=(px(x)) y=(WATER - 17.0) text-anchor="middle" { (format!("baseline {baseline:.0}")) }
            }
            rect x=(px((low + high - width) / 2.0)) y=(WATER - 7.0) width=(px(width)) height="14" fill="#000"
                fill-opacity="0.35" stroke="#000" {}
            line x1=(px(scale.x(tide.value))) x2=(px(scale.x(tide.value))) y1=(WATER - 28.0) y2=(WATER + 7.0)
                stroke="#000" stroke-width="3" {}
            text x=(px(scale.x(tide.value))) y=(WATER - 32.0) text-anchor="middle" font-size="16" font-weight="bold" {
                (format!("{:.0} ± {doubt:.0} ms", tide.value))
            }
        }
    }
}

fn px(value: f64) -> String {
    format!("{value:.1}")
}

/// Milliseconds to the drawing's units.
struct Scale {
    low: f64,
    high: f64,
}

impl Scale {
    /// From 20 ms below the lowest thing shown to 20 ms above the highest, on round tens, so that the picture of
    /// a patient changes its scale rarely.
    fn around(tide: &Tide) -> Self {
        let shown = || {
            let own = [tide.value - tide.doubt, tide.value + tide.doubt];
            own.into_iter().chain(tide.baseline).chain(tide.limits.iter().map(|(limit, _)| *limit))
        };
        let low = shown().fold(380.0, f64::min);
        let high = shown().fold(520.0, f64::max);
        Self {
            low: ((low - 20.0) / 10.0).floor() * 10.0,
            high: ((high + 20.0) / 10.0).ceil() * 10.0,
        }
    }

    fn x(&self, ms: f64) -> f64 {
        MARGIN + (ms - self.low) / (self.high - self.low) * (WIDTH - 2.0 * MARGIN)
    }

    fn right(&self) -> f64 {
        self.x(self.high)
    }

    /// Every 20 ms.
    fn ticks(&self) -> impl Iterator<Item = f64> {
        let first = (self.low / 20.0).ceil() * 20.0;
        let high = self.high;
        (0..).map(move |n| first + 20.0 * f64::from(n)).take_while(move |ms| *ms <= high)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use ebbmark_rules::ids::TierName;

    fn example() -> Tide {
        Tide {
            limits: vec![(470.0, TierName::new("review")), (500.0, TierName::new("call"))],
            baseline: Some(431.0),
            value: 512.0,
            doubt: 9.0,
        }
    }

    #[test]
    fn mark_is_as_wide_as_the_doubt() {
        let scale = Scale::around(&example());
        let per_ms = scale.x(1.0) - scale.x(0.0);
        let drawn = tide(&example(), "").into_string();
        assert!(drawn.contains(&format!("width=\"{:.1}\"", 18.0 * per_ms)), "{drawn}");
    }

    #[test]
    fn everything_named_is_on_the_drawing() {
        let drawn = tide(&example(), "QTc 512").into_string();
        for word in
            ["512 ± 9 ms", "470 review", "500 call", "baseline 431", "<title>QTc 512</title>"]
        {
            assert!(drawn.contains(word), "{word} is missing");
        }
        let scale = Scale::around(&example());
        for ms in [431.0, 470.0, 500.0, 503.0, 521.0] {
            assert!((MARGIN..=WIDTH - MARGIN).contains(&scale.x(ms)), "{ms} is off the drawing");
        }
    }

    #[test]
    fn a_value_far_out_stays_on_the_drawing() {
        let far = Tide { value: 690.0, doubt: 40.0, ..example() };
        assert!(Scale::around(&far).x(730.0) <= WIDTH - MARGIN);
    }
}
