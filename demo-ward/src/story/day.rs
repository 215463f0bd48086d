//! The story's own calendar: `2 06:55` is five to seven on the second day.

use chrono::{DateTime, Days as Number, NaiveDate, NaiveTime, TimeZone, Utc};
use chrono_tz::Tz;

/// The story's calendar.
#[derive(Debug, Clone)]
pub struct Days {
    first: NaiveDate,
    zone: Tz,
}

impl Days {
    pub(super) fn new(first: NaiveDate, zone: &str) -> Result<Self, String> {
        let zone = zone.parse().map_err(|_| format!("`{zone}` is no time zone"))?;
        Ok(Self { first, zone })
    }

    /// `2 06:55` as a moment.
    ///
    /// # Errors
    /// It isn't one, or the clocks skip or repeat it.
    pub fn at(&self, text: &str) -> Result<DateTime<Utc>, String> {
        let wrong = || format!("`{text}` is no time of the story, such as `2 06:55`");
        let (day, time) = text.split_once(' ').ok_or_else(wrong)?;
        let day: u64 = day.parse().map_err(|_| wrong())?;
        let time = NaiveTime::parse_from_str(time, "%H:%M").map_err(|_| wrong())?;
        let date = day
            .checked_sub(1)
            .and_then(|days| self.first.checked_add_days(Number::new(days)))
            .ok_or_else(wrong)?;
        let local = self.zone.from_local_datetime(&date.and_time(time)).single();
        Ok(local.ok_or_else(wrong)?.with_timezone(&Utc))
    }

    /// A moment as `2 06:55`.
    pub fn told(&self, at: DateTime<Utc>) -> String {
        let local = self.local(at);
        let day = (local.date_naive() - self.first).num_days() + 1;
        format!("{day} {}", local.format("%H:%M"))
    }

    /// A moment on the ward's own clock.
    pub fn local(&self, at: DateTime<Utc>) -> DateTime<Tz> {
        at.with_timezone(&self.zone)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn days_count_from_one_on_the_wards_own_clock() {
        let first = NaiveDate::from_ymd_opt(2027, 7, 1).unwrap();
        let days = Days::new(first, "Europe/London").unwrap();
        let at = days.at("2 00:30").unwrap();
        assert_eq!(at.to_rfc3339(), "2027-07-01T23:30:00+00:00");
        assert_eq!(days.told(at), "2 00:30");
        for wrong in ["0 08:00", "1 25:00", "x 08:00", "08:00"] {
            assert!(days.at(wrong).is_err(), "{wrong}");
        }
    }
}
