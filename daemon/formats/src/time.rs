//! Times as files give them: with an offset, or local and then read in the site's zone, with the raw text kept.

use crate::Site;
use chrono::{DateTime, NaiveDateTime, Utc};
use ebbmark_rules::fact::At;

/// A moment, and how it was told.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Told {
    pub at: At,
    /// The raw text and the zone that was assumed, where the text had no offset.
    pub assumed_zone: Option<(Box<str>, Box<str>)>,
    /// Something odd about it, in words.
    pub note: Option<&'static str>,
}

/// RFC 3339, or the same without an offset.
pub(crate) fn rfc3339(text: &str, site: &Site) -> Result<Told, String> {
    let text = text.trim();
    if let Ok(at) = DateTime::parse_from_rfc3339(text) {
        return Ok(Told { at: at.with_timezone(&Utc), assumed_zone: None, note: None });
    }
    for form in ["%Y-%m-%dT%H:%M:%S%.f", "%Y-%m-%d %H:%M:%S%.f", "%Y-%m-%dT%H:%M", "%Y-%m-%d %H:%M"]
    {
        if let Ok(local) = NaiveDateTime::parse_from_str(text, form) {
            return Ok(local_time(local, text, site));
        }
    }
    Err("is not a time such as 2026-03-10T02:15:00+01:00".into())
}

/// A local time in the site's zone.
pub(crate) fn local_time(local: NaiveDateTime, raw: &str, site: &Site) -> Told {
    let (at, zone, note) = site.resolve(local);
    Told { at, assumed_zone: Some((raw.into(), zone)), note }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn site() -> Site {
        Site { zone: chrono_tz::Europe::London, issuer: "SALT".into(), codes: Default::default() }
    }

    #[test]
    fn an_offset_is_believed_and_its_lack_is_noted() {
        let told = rfc3339("2026-03-10T02:15:00+01:00", &site()).unwrap();
        assert_eq!(told.at.to_rfc3339(), "2026-03-10T01:15:00+00:00");
        assert_eq!(told.assumed_zone, None);
        let told = rfc3339("2026-07-10 02:15", &site()).unwrap();
        assert_eq!(told.at.to_rfc3339(), "2026-07-10T01:15:00+00:00");
        assert_eq!(told.assumed_zone, Some(("2026-07-10 02:15".into(), "Europe/London".into())));
        assert!(rfc3339("10.03.2026", &site()).is_err());
    }

    /// British clocks went forward at 01:00 UTC on 29 March 2026 and back at 01:00 UTC on 25 October 2026.
    #[test]
    fn the_hours_of_the_clock_change_are_flagged() {
        let gap = rfc3339("2026-03-29T01:30:00", &site()).unwrap();
        assert_eq!(
            (gap.at.to_rfc3339().as_str(), gap.note.is_some()),
            ("2026-03-29T01:30:00+00:00", true)
        );
        let fold = rfc3339("2026-10-25T01:30:00", &site()).unwrap();
        assert_eq!(
            (fold.at.to_rfc3339().as_str(), fold.note.is_some()),
            ("2026-10-25T00:30:00+00:00", true)
        );
    }
}
