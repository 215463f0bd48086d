//! Delivery: carries messages from the outbox to people, for as long as it takes.
//!
//! A message is claimed, which is on the disk before anyone connects; sent on a connection of its own within a
//! deadline; and settled by what the server said. Only a 250 after the final dot is "sent".

pub mod daily;
mod mailer;
mod smtp;

pub use mailer::Mailer;

use crate::clock::Clock;
use crate::ledger::Ledger;
use crate::settings::Settings;
use crate::store::StoreError;
use crate::store::outbox::{Outgoing, Sending};
use chrono::TimeDelta;
use ebbmark_rules::fact::{At, Trouble};
use ebbmark_rules::ids::ContentHash;
use mailer::Answer;
use std::sync::Arc;
use std::time::Duration;
use tokio::sync::watch;
use tokio::task::JoinSet;
use tokio_util::sync::CancellationToken;

/// Messages under way at once: a few connections, so that one slow recipient does not hold up the others.
const AT_ONCE: usize = 4;
/// First and longest pause between two attempts.
const FIRST_PAUSE_S: i64 = 15;
const LONGEST_PAUSE_S: i64 = 15 * 60;
/// Without any success for this long the mail itself is in trouble.
const TROUBLE_AFTER: TimeDelta = TimeDelta::minutes(5);
/// How often the outbox is looked at when nothing wakes us.
const LOOK_EVERY: Duration = Duration::from_secs(30);

/// Delivers until asked to stop; messages under way are settled first.
///
/// # Errors
/// The store failed.
pub async fn run(
    ledger: Ledger,
    settings: watch::Receiver<Arc<Settings>>,
    clock: Clock,
    stop: CancellationToken,
) -> Result<(), StoreError> {
    let news = ledger.mail();
    let mut under_way = JoinSet::new();
    let mut failing_since: Option<At> = None;
    let mut mailer = Mailer::new(&settings.borrow());
    let mut changes = settings.clone();
    loop {
        if changes.has_changed().unwrap_or(false) {
            mailer = Mailer::new(&changes.borrow_and_update());
        }
        if !stop.is_cancelled() && under_way.len() < AT_ONCE {
            for message in ledger.claim(AT_ONCE - under_way.len()).await? {
                let mailer = mailer.clone();
                under_way.spawn(async move {
                    let answer = mailer.send(&message).await;
                    (message, answer)
                });
            }
        }
        if under_way.is_empty() {
            if stop.is_cancelled() {
                return Ok(());
            }
            let next = ledger.next_message().await?;
            let due = async {
                match next {
                    Some(at) => clock.until(at).await,
                    None => std::future::pending().await,
                }
            };
            tokio::select! {
                () = stop.cancelled() => {}
                () = news.notified() => {}
                () = due => {}
                () = tokio::time::sleep(LOOK_EVERY) => {}
            }
            continue;
        }
        tokio::select! {
            Some(done) = under_way.join_next() => match done {
                Ok((message, answer)) => {
                    let sending = settled(&message, answer, clock.now());
                    failing_since = health(&ledger, &sending, failing_since, clock.now()).await?;
                    ledger.settle(message.rows, sending).await?;
                }
                // The message stays claimed, and goes out again at the next start, the same bytes under the same id.
                Err(error) => tracing::error!(%error, "sending a message failed in a way that it should not"),
            },
            () = news.notified(), if under_way.len() < AT_ONCE && !stop.is_cancelled() => {}
        }
    }
}

/// What the server's answer means for the message.
fn settled(message: &Outgoing, answer: Answer, now: At) -> Sending {
    match answer {
        Answer::Sent { reply } => {
            tracing::info!(
                outbox = message.id,
                attempts = message.attempts + 1,
                "a message was sent"
            );
            Sending::Sent { reply }
        }
        Answer::Refused { verb, reply } => {
            tracing::error!(outbox = message.id, verb, "the server refuses a recipient for good");
            Sending::Refused { reply }
        }
        Answer::NotNow { verb, why } => {
            let pause = pause(message);
            let wait_s = pause.num_seconds();
            tracing::warn!(
                outbox = message.id,
                attempts = message.attempts + 1,
                wait_s,
                verb,
                "a message waits"
            );
            Sending::Waiting { next_try: now + pause, why }
        }
    }
}

/// Raises a technical alert once nothing has got through for a while, and ends it with the first success.
async fn health(
    ledger: &Ledger,
    sending: &Sending,
    failing_since: Option<At>,
    now: At,
) -> Result<Option<At>, StoreError> {
    if !matches!(sending, Sending::Waiting { .. }) {
        if ledger.trouble(Trouble::Mail, false).await? {
            let waiting = ledger.hurry().await?;
            tracing::info!(waiting, "mail goes out again");
        }
        return Ok(None);
    }
    let since = failing_since.unwrap_or(now);
    if now - since >= TROUBLE_AFTER && ledger.trouble(Trouble::Mail, true).await? {
        tracing::error!("no mail has gone out for a while");
    }
    Ok(Some(since))
}

/// From 15 s to 15 min, twice as long each time, give or take a fifth. The lot is drawn from the message's id, so that
/// many messages that failed together do not come back together.
fn pause(message: &Outgoing) -> TimeDelta {
    let plain = FIRST_PAUSE_S.saturating_mul(1 << message.attempts.min(10)).min(LONGEST_PAUSE_S);
    let lot = ContentHash::of(format!("{} {}", message.message_id, message.attempts).as_bytes());
    let lot = i64::from_str_radix(lot.as_str().get(..4).unwrap_or("8000"), 16).unwrap_or(0x8000);
    let fifth = plain * 1_000 / 5;
    TimeDelta::milliseconds(plain * 1_000 - fifth + 2 * fifth * lot / 0xffff)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::store::outbox::Bytes;
    use ebbmark_rules::ids::{AlertId, Private};

    #[test]
    fn pauses_grow_to_a_quarter_of_an_hour_and_stay_there() {
        let message = |attempts| Outgoing {
            id: 1,
            rows: vec![1],
            alert: Some(AlertId::new("a")),
            step: 0,
            recipient: Private::new("x@y.example"),
            message_id: "m@y.example".to_owned(),
            bytes: Bytes(vec![]),
            attempts,
            created_at: At::UNIX_EPOCH,
        };
        for (attempts, plain_s) in
            [(0, 15.0), (1, 30.0), (5, 480.0), (6, 900.0), (40, 900.0), (u32::MAX, 900.0)]
        {
            let found = pause(&message(attempts)).as_seconds_f64();
            assert!((plain_s * 0.8..=plain_s * 1.2).contains(&found), "{attempts}: {found}");
        }
    }
}
