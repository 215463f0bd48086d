//! Once a day, at the hospital's own time: the message that the service is alive.

use crate::clock::Clock;
use crate::ledger::Ledger;
use crate::settings::{Daily, Settings};
use crate::store::StoreError;
use chrono::{Days, NaiveDate, TimeZone};
use chrono_tz::Tz;
use ebbmark_rules::fact::At;
use std::sync::Arc;
use tokio::sync::watch;
use tokio_util::sync::CancellationToken;

/// Posts the daily message until asked to stop. A day's message is posted once, also over restarts; a start after its
/// time posts it at once.
///
/// # Errors
/// The store failed.
pub async fn run(
    ledger: Ledger,
    mut settings: watch::Receiver<Arc<Settings>>,
    clock: Clock,
    stop: CancellationToken,
) -> Result<(), StoreError> {
    loop {
        let (daily, zone) = {
            let settings = settings.borrow_and_update();
            (settings.mail.daily.clone(), settings.site.zone)
        };
        let next = match daily {
            Some(daily) => {
                let now = clock.now();
                let today = now.with_timezone(&zone).date_naive();
                let due = moment(today, &daily, zone);
                if due <= now {
                    ledger.daily(today, daily.to.clone()).await?;
                    today.checked_add_days(Days::new(1)).map(|day| moment(day, &daily, zone))
                } else {
                    Some(due)
                }
            }
            None => None,
        };
        let due = async {
            match next {
                Some(at) => clock.until(at).await,
                None => std::future::pending().await,
            }
        };
        tokio::select! {
            () = stop.cancelled() => return Ok(()),
            changed = settings.changed() => if changed.is_err() {
                return Ok(());
            },
            () = due => {}
        }
    }
}

/// The day's moment. On the day of a clock change: the first of two, or where the time is left out the hour after.
fn moment(day: NaiveDate, daily: &Daily, zone: Tz) -> At {
    let local = day.and_time(daily.at);
    let found = zone.from_local_datetime(&local).earliest();
    let later = || zone.from_local_datetime(&(local + chrono::TimeDelta::hours(1))).earliest();
    found.or_else(later).map_or_else(|| local.and_utc(), |at| at.to_utc())
}

#[cfg(test)]
mod tests {
    use super::*;
    use chrono::NaiveTime;

    #[test]
    fn moment_holds_over_both_clock_changes() {
        let at = |day: &str, time: &str| {
            let at: NaiveTime = time.parse().unwrap();
            let daily = Daily { at, to: Vec::new() };
            moment(day.parse().unwrap(), &daily, chrono_tz::Europe::London).to_rfc3339()
        };
        assert_eq!(at("2026-03-28", "07:00:00"), "2026-03-28T07:00:00+00:00");
        assert_eq!(at("2026-03-29", "07:00:00"), "2026-03-29T06:00:00+00:00");
        // 01:30 is left out on 29 March and comes twice on 25 October.
        assert_eq!(at("2026-03-29", "01:30:00"), "2026-03-29T01:30:00+00:00");
        assert_eq!(at("2026-10-25", "01:30:00"), "2026-10-25T00:30:00+00:00");
    }
}
