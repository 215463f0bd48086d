//! The service's last day in numbers: what the daily message says.

use super::write::Writing;
use super::{StoreError, audit, micros, moment};
use chrono::TimeDelta;
use ebbmark_rules::fact::At;

/// What happened within the last 24 hours, and how things stand.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct Day {
    /// Alerts raised within the day, by tier, the highest tier first.
    pub raised: Vec<(String, u64)>,
    /// Alerts that nobody has answered.
    pub open: u64,
    /// Alerts that somebody has taken on.
    pub acknowledged: u64,
    /// Messages that the mail server took within the day.
    pub sent: u64,
    /// Messages that wait.
    pub waiting: u64,
    /// Messages refused for good within the day.
    pub refused: u64,
    /// Files taken in within the day.
    pub files: u64,
    /// Files held within the day.
    pub held: u64,
    /// When the last tracing came in.
    pub last_tracing: Option<At>,
    /// Rows of the audit chain.
    pub audit_rows: u64,
    /// Its last hash.
    pub audit_head: String,
}

impl Writing<'_> {
    /// The day up to now.
    ///
    /// # Errors
    /// The store failed.
    pub fn day(&self) -> Result<Day, StoreError> {
        let fail = || StoreError::sql("sum up the day of");
        let since = micros(self.at() - TimeDelta::days(1));
        let count = |query: &str| {
            self.sql()
                .query_row(query, [since], |row| row.get::<_, i64>(0))
                .map(i64::cast_unsigned)
                .map_err(fail())
        };
        let raised = self
            .sql()
            .prepare(
                "SELECT tier, count(*) FROM alert WHERE raised_us >= ? GROUP BY tier ORDER BY max(tier_rank) DESC",
            )
            .and_then(|mut query| {
                query
                    .query_map([since], |row| Ok((row.get(0)?, row.get::<_, i64>(1)?.cast_unsigned())))?
                    .collect()
            })
            .map_err(fail())?;
        let last_tracing: Option<i64> = self
            .sql()
            .query_row("SELECT max(received_us) FROM fact WHERE kind = 'tracing'", [], |row| {
                row.get(0)
            })
            .map_err(fail())?;
        Ok(Day {
            raised,
            open: count("SELECT count(*) FROM alert WHERE state = 'open' AND ?1 = ?1")?,
            acknowledged: count(
                "SELECT count(*) FROM alert WHERE state = 'acknowledged' AND ?1 = ?1",
            )?,
            sent: count("SELECT count(*) FROM outbox WHERE state = 'sent' AND settled_us >= ?")?,
            waiting: count("SELECT count(*) FROM outbox WHERE state = 'waiting' AND ?1 = ?1")?,
            refused: count(
                "SELECT count(*) FROM outbox WHERE state = 'refused' AND settled_us >= ?",
            )?,
            files: count("SELECT count(*) FROM file WHERE outcome = 'accepted' AND at_us >= ?")?,
            held: count("SELECT count(*) FROM file WHERE outcome = 'held' AND at_us >= ?")?,
            last_tracing: last_tracing.map(moment),
            audit_rows: count("SELECT coalesce(max(seq), 0) FROM audit WHERE ?1 = ?1")?,
            audit_head: audit::head(self.sql())?,
        })
    }
}
