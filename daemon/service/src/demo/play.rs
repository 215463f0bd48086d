//! Playing the story: the clock goes from one moment to the next, whether the story's or the service's own deadline, and
//! at each one everything comes to rest before it goes on. So the same story gives the same alerts at any speed, and also
//! when it is killed and goes on.

use super::stage::Stage;
use crate::clock::{Clock, Manual};
use crate::ledger::Draft;
use crate::service::{Service, Setup, StartError};
use crate::settings::{Problems, Settings};
use crate::store::{Reader, StoreError};
use ebbmark_demo_ward::story::{Act, ExportError, Step, Story, StoryError};
use ebbmark_rules::fact::{At, Body, Fact, OverRead, Source};
use ebbmark_rules::ids::{PatientId, Person, TracingId};
use ebbmark_rules::units::Ms;
use std::io;
use std::time::{Duration, Instant};

/// Why a demo ended early.
#[derive(Debug, thiserror::Error)]
#[allow(missing_docs, reason = "each says what it is")]
pub enum DemoError {
    #[error(transparent)]
    Story(#[from] StoryError),
    #[error(transparent)]
    Export(#[from] ExportError),
    #[error("cannot {doing}: {source}")]
    Folder { doing: &'static str, source: io::Error },
    #[error("the demo's own settings are wrong: {0}")]
    Settings(#[from] Problems),
    #[error(transparent)]
    Start(#[from] StartError),
    #[error(transparent)]
    Store(#[from] StoreError),
    #[error("waited {} s in vain for {what}", PATIENCE.as_secs())]
    Stuck { what: &'static str },
    #[error("the story says at {at} that {what}, which isn't there")]
    NotThere { at: String, what: &'static str },
}

impl DemoError {
    pub(super) fn folder(doing: &'static str) -> impl FnOnce(io::Error) -> Self {
        move |source| DemoError::Folder { doing, source }
    }
}

/// Waiting for rest never takes this long unless it never comes.
const PATIENCE: Duration = Duration::from_secs(60);
/// How often it is looked whether everything is at rest.
const LOOK_EVERY: Duration = Duration::from_millis(4);

/// A story that is being played.
#[derive(Debug)]
pub struct Play<'s> {
    story: &'s Story,
    stage: &'s Stage,
    service: Service,
    hand: Manual,
    now: At,
    next: usize,
    exported: u64,
}

/// Where the clock goes next.
#[derive(Debug, Clone, Copy)]
pub struct Stop<'s> {
    /// When.
    pub at: At,
    /// What happens then; `None` for a deadline of the service's own, and for the end.
    pub step: Option<&'s Step>,
}

impl<'s> Play<'s> {
    /// Starts the service where the folder's story stands: at its beginning, or where it was stopped or killed.
    ///
    /// # Errors
    /// The service doesn't start, or doesn't come to rest.
    pub async fn begin(story: &'s Story, stage: &'s Stage) -> Result<Self, DemoError> {
        let next = position(story, stage)?;
        let before = next.checked_sub(1).and_then(|last| story.steps.get(last));
        let now = before.map_or(story.begins, |step| step.at);
        let (clock, hand) = Clock::manual(now);
        let settings = Settings::read(&stage.settings_file())?;
        let service = Service::start(Setup {
            settings_file: stage.settings_file(),
            clock,
            render: crate::mail::renderer(&settings),
            settings,
        })
        .await?;
        let is_export =
            |step: &&Step| matches!(&step.act, Act::Export(export) if stage.has(export));
        let exported = story.steps.iter().filter(is_export).count() as u64;
        let play = Self { story, stage, service, hand, now, next, exported };
        play.rest().await?;
        Ok(play)
    }

    /// What the clock shows.
    pub fn now(&self) -> At {
        self.now
    }

    /// The store, to look into.
    ///
    /// # Errors
    /// It can't be read.
    pub fn reader(&self) -> Result<Reader, StoreError> {
        Reader::open(&self.stage.store())
    }

    /// Where the clock goes next; `None` once the story has ended.
    pub fn next(&self) -> Option<Stop<'s>> {
        let step = self.story.steps.get(self.next);
        let until = step.map_or(self.story.ends, |step| step.at);
        let due = *self.service.ledger().due().borrow();
        match due.filter(|due| *due <= until) {
            Some(due) => Some(Stop { at: due.max(self.now), step: None }),
            None if step.is_some() => Some(Stop { at: until, step }),
            None if self.now < until => Some(Stop { at: until, step: None }),
            None => None,
        }
    }

    /// Sets the clock to a stop, does what happens there, and waits until everything is at rest.
    ///
    /// # Errors
    /// Something broke, or doesn't come to rest.
    pub async fn go(&mut self, stop: &Stop<'_>) -> Result<(), DemoError> {
        self.now = stop.at;
        self.hand.set(stop.at);
        self.service.ledger().advance().await?;
        if let Some(step) = stop.step {
            self.act(step).await?;
            self.next += 1;
        }
        self.rest().await
    }

    /// Stops the service, in its phases.
    ///
    /// # Errors
    /// A part of it failed.
    pub async fn end(self) -> Result<(), DemoError> {
        Ok(self.service.stop().await?)
    }

    async fn act(&mut self, step: &Step) -> Result<(), DemoError> {
        let missing = |what| DemoError::NotThere { at: self.story.days.told(step.at), what };
        let (patient, by, body) = match &step.act {
            Act::Export(export) => {
                self.stage.drop_in(export)?;
                self.exported += 1;
                return Ok(());
            }
            Act::Answer { patient, concern, by, intent } => {
                let open = self.reader()?.alerts(false)?;
                let alert = open
                    .into_iter()
                    .map(|row| row.alert)
                    .find(|open| {
                        open.patient.as_ref() == Some(patient) && *open.concern == **concern
                    })
                    .ok_or_else(|| missing("somebody answers an alert"))?;
                let by = Person::new(by.as_str());
                let intent = intent.as_str().into();
                (None, by.clone(), Body::Acknowledged { alert: alert.id, by, intent })
            }
            Act::OverRead { patient, qt_ms, by, why } => {
                let tracing = latest(&self.reader()?, patient)?
                    .ok_or_else(|| missing("somebody reads a tracing"))?;
                let by = Person::new(by.as_str());
                let read = OverRead {
                    tracing,
                    by: by.clone(),
                    qt: Ms::new(*qt_ms).ok(),
                    qrs: None,
                    rr: None,
                    lead: None,
                    tangent: false,
                    why: why.as_str().into(),
                };
                (Some(patient.clone()), by, Body::OverRead(read))
            }
        };
        let draft = Draft { occurred_at: Some(step.at), source: Source::Person(by), patient, body };
        self.service.ledger().learn(vec![draft]).await?;
        Ok(())
    }

    /// Waits until every exported file has its outcome and no message is on its way.
    async fn rest(&self) -> Result<(), DemoError> {
        let until = Instant::now() + PATIENCE;
        loop {
            let reader = self.reader()?;
            let files: u64 = reader.file_counts()?.values().sum();
            let messages = reader.message_counts()?;
            drop(reader);
            let on_their_way: u64 = ["pending", "claimed", "waiting"]
                .iter()
                .filter_map(|state| messages.get(*state))
                .sum();
            if files >= self.exported && on_their_way == 0 {
                return Ok(());
            }
            if Instant::now() > until {
                let what =
                    if on_their_way > 0 { "messages to be sent" } else { "a file to be taken in" };
                return Err(DemoError::Stuck { what });
            }
            tokio::select! {
                () = self.service.failed() => return Err(StoreError::Stopped.into()),
                () = tokio::time::sleep(LOOK_EVERY) => {}
            }
        }
    }
}

/// How many steps of the story have been done in this folder.
fn position(story: &Story, stage: &Stage) -> Result<usize, DemoError> {
    let done = |step: &Step| matches!(&step.act, Act::Export(export) if stage.has(export));
    let mut next = story.steps.iter().rposition(done).map_or(0, |last| last + 1);
    if next > 0 && stage.store().database().exists() {
        let mut said = Vec::new();
        Reader::open(&stage.store())?.facts(|_, fact| {
            if matches!(fact.source, Source::Person(_)) {
                said.push(fact);
            }
            Ok(())
        })?;
        while story.steps.get(next).is_some_and(|step| said.iter().any(|fact| is_of(step, fact))) {
            next += 1;
        }
    }
    Ok(next)
}

/// Whether a fact is what a step of the story does.
fn is_of(step: &Step, fact: &Fact) -> bool {
    let (who, is_kind) = match &step.act {
        Act::Export(_) => return false,
        Act::Answer { by, .. } => (by, matches!(fact.body, Body::Acknowledged { .. })),
        Act::OverRead { by, .. } => (by, matches!(fact.body, Body::OverRead(_))),
    };
    is_kind
        && fact.occurred_at == step.at
        && fact.source == Source::Person(Person::new(who.as_str()))
}

/// A patient's latest tracing.
fn latest(reader: &Reader, patient: &PatientId) -> Result<Option<TracingId>, StoreError> {
    let mut found: Option<(At, TracingId)> = None;
    reader.facts(|_, fact| {
        if let (Some(whose), Body::Tracing(tracing)) = (&fact.patient, &fact.body)
            && whose == patient
            && found.as_ref().is_none_or(|(at, _)| *at <= fact.occurred_at)
        {
            found = Some((fact.occurred_at, tracing.id.clone()));
        }
        Ok(())
    })?;
    Ok(found.map(|(_, id)| id))
}
