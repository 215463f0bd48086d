//! The median beats of all leads on one another, with QRS onset, QRS end and T end marked, and every lead's own T
//! end as a tick, so that a person sees what the reading rests on.

use super::path;
use ebbmark_measure::{MedianBeat, Ms};
use maud::{Markup, html};

const WIDTH: f64 = 640.0;
const HEIGHT: f64 = 300.0;
const TOP: f64 = 34.0;
const FLOOR: f64 = 250.0;

/// Draws the median beats. `caption` says in words what it shows, for a reader who hears the page or sees no picture.
pub fn beats(median: &MedianBeat, caption: &str) -> Markup {
    let view = View::of(median);
    let marks = [
        ("QRS onset", Some(median.qrs_on)),
        ("QRS end", Some(median.qrs_off)),
        ("T end", median.t_end),
    ];
    html! {
        svg xmlns="http://www.w3.org/2000/svg" viewBox=(format!("0 0 {WIDTH} {HEIGHT}")) role="img" class="beats"
            font-family="DejaVu Sans, sans-serif" font-size="12" fill="#000" {
            title { (caption) }
            rect width=(WIDTH) height=(HEIGHT) fill="#fff" {}
            @for tick in view.ticks() {
                line x1=(px(view.x(tick))) x2=(px(view.x(tick))) y1=(TOP) y2=(FLOOR) stroke="#ccc" {}
            }
            @for lead in &median.leads {
                path d=(path(lead.uv.iter().enumerate().map(|(i, uv)| {
                        (view.x(i as f64 * 1000.0 / median.sampling_hz), view.y(f64::from(*uv)))
                    }))) fill="none" stroke="#000" stroke-opacity="0.55" stroke-width="1" {}
            }
            @for (name, mark) in marks {
                @if let Some(at) = mark {
                    line x1=(px(view.x(at.get()))) x2=(px(view.x(at.get()))) y1=(TOP) y2=(FLOOR)
                        stroke="#000" stroke-width="2" stroke-dasharray=(if name == "QRS end" { "3 4" } else { "none" }) {}
                    text x=(px(view.x(at.get()))) y=(FLOOR + if name == "QRS end" { 30.0 } else { 16.0 })
                        text-anchor="middle" { (name) }
                }
            }
            @for (row, own) in [(0.0, own_ends(median, false)), (8.0, own_ends(median, true))] {
                @for at in own {
                    line x1=(px(view.x(at.get()))) x2=(px(view.x(at.get()))) y1=(FLOOR - 18.0 + row)
                        y2=(FLOOR - 12.0 + row) stroke="#000" stroke-width="1.5" {}
                }
            }
            @if let Some(end) = median.t_end {
                @let (from, to) = (view.x(median.qrs_on.get()), view.x(end.get()));
                path d=(format!("M{from:.1} {0}H{to:.1}", TOP - 6.0)) stroke="#000" stroke-width="1.5" {}
                text x=(px((from + to) / 2.0)) y=(TOP - 11.0) text-anchor="middle" font-size="16" font-weight="bold" {
                    (format!("QT {:.0} ms", end.get() - median.qrs_on.get()))
                }
            }
            text x="8" y=(HEIGHT - 6.0) font-size="11" {
                "grid 100 ms; short ticks: each lead's own T end (upper row tangent, lower row threshold)"
            }
        }
    }
}

/// Each lead's own T end, by threshold or by tangent.
fn own_ends(median: &MedianBeat, threshold: bool) -> impl Iterator<Item = Ms> + '_ {
    median
        .leads
        .iter()
        .filter_map(move |lead| if threshold { lead.t_end_threshold } else { lead.t_end_tangent })
}

fn px(value: f64) -> String {
    format!("{value:.1}")
}

/// Milliseconds and microvolts to the drawing's units.
struct View {
    ms: f64,
    low: f64,
    high: f64,
}

impl View {
    fn of(median: &MedianBeat) -> Self {
        let longest = median.leads.iter().map(|lead| lead.uv.len()).max().unwrap_or(0);
        let all = || {
            median
                .leads
                .iter()
                .flat_map(|lead| &lead.uv)
                .map(|uv| f64::from(*uv))
                .filter(|uv| uv.is_finite())
        };
        let (low, high) = (all().fold(0.0, f64::min), all().fold(0.0, f64::max));
        Self {
            ms: (longest as f64 * 1000.0 / median.sampling_hz).max(1.0),
            low,
            // A flat line has no height to divide by.
            high: if high - low < 1.0 { low + 1.0 } else { high },
        }
    }

    fn x(&self, ms: f64) -> f64 {
        8.0 + ms / self.ms * (WIDTH - 16.0)
    }

    fn y(&self, uv: f64) -> f64 {
        FLOOR - 24.0 - (uv - self.low) / (self.high - self.low) * (FLOOR - 24.0 - TOP)
    }

    fn ticks(&self) -> impl Iterator<Item = f64> {
        let end = self.ms;
        (0..).map(|n| 100.0 * f64::from(n)).take_while(move |ms| *ms <= end)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use ebbmark_measure::{Lead, MedianLead};

    fn ms(value: f64) -> Ms {
        Ms::new(value).unwrap()
    }

    #[test]
    fn marks_and_value_agree() {
        let lead = MedianLead {
            lead: Lead::II,
            uv: vec![0.0; 400],
            t_end_tangent: Some(ms(500.0)),
            t_end_threshold: None,
        };
        let median = MedianBeat {
            sampling_hz: 500.0,
            qrs_on: ms(100.0),
            qrs_off: ms(190.0),
            t_end: Some(ms(512.0)),
            leads: vec![lead],
        };
        let drawn = beats(&median, "QT 412 ms").into_string();
        for word in ["QT 412 ms", "QRS onset", "T end"] {
            assert!(drawn.contains(word), "{word} is missing");
        }
        let without = MedianBeat { t_end: None, ..median };
        assert!(
            !beats(&without, "").into_string().contains("T end</text>"),
            "no mark where nothing could be told"
        );
    }
}
