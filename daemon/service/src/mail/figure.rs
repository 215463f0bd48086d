//! Drawings in a letter: the same thing as lines of text and as a picture.

use crate::draw;
use ebbmark_rules::alert::Tide;
use std::fmt::Write;
use std::panic::catch_unwind;

/// A drawing.
#[derive(Debug)]
pub(super) struct Figure {
    /// What names the picture within the message.
    pub(super) name: &'static str,
    /// The drawing in letters, for plain text only.
    pub(super) scale: Option<String>,
    /// What it shows, in words, for both bodies.
    pub(super) caption: String,
    /// The picture, PNG, where there is one.
    pub(super) png: Option<Vec<u8>>,
}

/// Points per unit of the drawing: sharp on a phone, and a few kilobytes.
const SCALE: f32 = 1.5;
/// Letters of the tide line's scale.
const LETTERS: usize = 56;

/// The tide line.
pub(super) fn tide(tide: &Tide, pictures: bool) -> Figure {
    let caption = caption(tide);
    let svg = || draw::tide(tide, &caption).into_string();
    let png = pictures.then(|| picture(&svg())).flatten();
    Figure { name: "tide", scale: Some(scale(tide)), png, caption }
}

/// A picture that can't be made is left out, even where making it panics: no alert waits for a drawing, and its numbers
/// stand in the text.
fn picture(svg: &str) -> Option<Vec<u8>> {
    match catch_unwind(|| draw::png(svg, SCALE)) {
        Ok(Ok(png)) => Some(png),
        Ok(Err(error)) => {
            tracing::error!(%error, "a picture for a message can't be made");
            None
        }
        Err(_) => {
            tracing::error!("making a picture for a message failed in a way that it should not");
            None
        }
    }
}

fn caption(tide: &Tide) -> String {
    let mut text = format!("QTc now {:.0} ± {:.0} ms", tide.value, tide.doubt);
    // Writing to a String can't fail.
    if let Some(baseline) = tide.baseline {
        let _ = write!(text, "; baseline {baseline:.0}");
    }
    for (limit, tier) in &tide.limits {
        let _ = write!(text, "; {tier} from {limit:.0}");
    }
    text
}

/// `390 ......b............|=====#====.....|... 540`: `b` the baseline, `|` the limits, `#` now, `=` its doubt.
fn scale(tide: &Tide) -> String {
    let shown = || {
        [tide.value - tide.doubt, tide.value + tide.doubt]
            .into_iter()
            .chain(tide.baseline)
            .chain(tide.limits.iter().map(|(limit, _)| *limit))
    };
    let low = ((shown().fold(400.0, f64::min) - 10.0) / 10.0).floor() * 10.0;
    let high = ((shown().fold(520.0, f64::max) + 10.0) / 10.0).ceil() * 10.0;
    let mut letters = vec!['.'; LETTERS];
    let mut put = |ms: f64, letter: char| {
        // Which of the letters' intervals it falls into; past the end it is the last.
        let share = ((ms - low) / (high - low)).clamp(0.0, 1.0);
        let place = letters.iter().enumerate().take_while(|(i, _)| {
            f64::from(u32::try_from(*i).unwrap_or(0)) / LETTERS as f64 <= share
        });
        if let Some((place, _)) = place.last()
            && let Some(found) = letters.get_mut(place)
        {
            *found = letter;
        }
    };
    let step = (high - low) / LETTERS as f64;
    let mut ms = tide.value - tide.doubt;
    while ms <= tide.value + tide.doubt {
        put(ms, '=');
        ms += step / 2.0;
    }
    tide.limits.iter().for_each(|(limit, _)| put(*limit, '|'));
    if let Some(baseline) = tide.baseline {
        put(baseline, 'b');
    }
    put(tide.value, '#');
    format!("{low:.0} {} {high:.0}", letters.iter().collect::<String>())
}

#[cfg(test)]
mod tests {
    use super::*;
    use ebbmark_rules::ids::TierName;

    fn example() -> Tide {
        Tide {
            limits: vec![(460.0, TierName::new("note")), (500.0, TierName::new("call"))],
            baseline: Some(431.0),
            value: 512.0,
            doubt: 9.0,
        }
    }

    #[test]
    fn letters_stand_in_the_order_of_what_they_mean() {
        let scale = scale(&example());
        let order: String = scale.chars().filter(|letter| "b|#".contains(*letter)).collect();
        assert_eq!(order, "b||#", "{scale}");
        // 400 - 10 to 521 + 10, on round tens.
        assert!(scale.starts_with("390 .") && scale.ends_with(" 540"), "{scale}");
        assert!(scale.len() <= 66, "{scale}");
    }

    #[test]
    fn value_far_out_stays_on_the_scale() {
        let far = Tide { value: 690.0, doubt: 40.0, baseline: None, ..example() };
        assert!(scale(&far).contains('#'));
        let low = Tide { value: 250.0, ..far };
        assert!(scale(&low).contains('#'));
    }

    #[test]
    fn caption_says_all_that_is_drawn() {
        let figure = tide(&example(), true);
        assert_eq!(
            figure.caption,
            "QTc now 512 ± 9 ms; baseline 431; note from 460; call from 500"
        );
        assert!(figure.png.unwrap().starts_with(b"\x89PNG"));
    }
}
