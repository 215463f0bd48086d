//! Taking settled files in, a portion at a time: read, then recognised and measured by all workers at once, then handed
//! to the ledger in their order. One portion bounds the memory and the size of a transaction.

use super::pairs::Job;
use super::{Ends, Intake, facts, open};
use crate::ledger::{Arrival, Reading, Tally};
use crate::reading::{self, Unread};
use crate::settings::Settings;
use crate::store::{Contents, Held, Reader, Seen, StoreError, What};
use ebbmark_formats::{Content, Error, Kind};
use ebbmark_measure::Options;
use ebbmark_rules::fact::At;
use ebbmark_rules::ids::ContentHash;
use rayon::prelude::*;
use std::path::{Path, PathBuf};
use std::time::Duration;
use tokio_util::sync::CancellationToken;

/// Files of a portion.
const FILES: usize = 64;
/// Bytes of a portion, together; a single larger file is a portion of its own.
const BYTES: u64 = 64 << 20;

/// A file that was opened.
struct Opened {
    seen: Seen,
    bytes: Vec<u8>,
    kind: Result<Kind, Unread>,
    hash: ContentHash,
    beside: Vec<Beside>,
    /// Where several files make one tracing: the list of their hashes.
    list: Option<String>,
    /// Stands for all of it: the hash of the file, or of the list.
    whole: ContentHash,
}

struct Beside {
    name: String,
    seen: Seen,
    bytes: Vec<u8>,
    hash: ContentHash,
}

/// What became of a job before it was read.
enum Step {
    Opened(Box<Opened>),
    Ended(Arrival),
    /// Another look in a later pass.
    Later,
}

impl Intake {
    pub(super) fn take(
        &mut self,
        settings: &Settings,
        jobs: Vec<Job>,
        now: Duration,
        stop: &CancellationToken,
    ) -> Result<Tally, Ends> {
        let mut tally = Tally::default();
        let mut rest = jobs.as_slice();
        while !rest.is_empty() && !stop.is_cancelled() {
            let (portion, after) = rest.split_at(length(rest));
            rest = after;
            let arrivals = self.arrivals(settings, portion, now)?;
            let done: Vec<PathBuf> = arrivals.iter().flat_map(paths).collect();
            if !arrivals.is_empty() {
                tally.add(self.ledger.files(arrivals)?);
            }
            for path in &done {
                self.settling.forget(path);
            }
        }
        Ok(tally)
    }

    fn arrivals(
        &self,
        settings: &Settings,
        portion: &[Job],
        now: Duration,
    ) -> Result<Vec<Arrival>, StoreError> {
        let steps: Vec<Vec<Step>> = self
            .workers
            .install(|| portion.par_iter().map(|job| self.open(settings, job, now)).collect());
        let steps: Vec<Step> = steps.into_iter().flatten().collect();
        let reader = Reader::open(&self.store)?;
        let mut known = Vec::with_capacity(steps.len());
        for step in &steps {
            known.push(match step {
                Step::Opened(opened) => reader.is_accepted(&opened.whole)?,
                Step::Ended(_) | Step::Later => false,
            });
        }
        drop(reader);
        let site = settings.reading_site();
        let (contents, at) = (self.store.contents(), self.clock.now());
        let pair_wait = settings.intake.pair_wait;
        let waits: Vec<Duration> = steps
            .iter()
            .map(|step| match step {
                Step::Opened(opened) => {
                    self.settling.waited(&opened.seen.path, now).unwrap_or(pair_wait)
                }
                Step::Ended(_) | Step::Later => Duration::ZERO,
            })
            .collect();
        let arrivals: Result<Vec<Option<Arrival>>, StoreError> = self.workers.install(|| {
            steps
                .into_par_iter()
                .zip(known)
                .zip(waits)
                .map(|((step, known), waited)| match step {
                    Step::Opened(opened) => {
                        read(*opened, known, waited >= pair_wait, &site, &contents, at)
                    }
                    Step::Ended(arrival) => Ok(Some(arrival)),
                    Step::Later => Ok(None),
                })
                .collect()
        });
        Ok(arrivals?.into_iter().flatten().collect())
    }

    /// Opens a job's file and the files that it names. More than one step comes of a sample file that its header
    /// does not name.
    fn open(&self, settings: &Settings, job: &Job, now: Duration) -> Vec<Step> {
        let step = self.open_one(settings, job, now);
        let Some(samples) = &job.brought_by else { return vec![step] };
        let is_named = match &step {
            Step::Opened(opened) => {
                opened.beside.iter().any(|beside| beside.seen.path == samples.path)
            }
            Step::Ended(_) | Step::Later => return vec![step],
        };
        if is_named {
            return vec![step];
        }
        let reason = "is a sample file that the header of the same name does not name";
        vec![step, Step::Ended(held(samples.clone(), None, What::Tracing, reason))]
    }

    fn open_one(&self, settings: &Settings, job: &Job, now: Duration) -> Step {
        if let Some((what, Held(reason))) = &job.held {
            return Step::Ended(held(job.seen.clone(), None, *what, reason));
        }
        let (root, cap) = (&settings.folders.export, settings.intake.largest_file);
        let patient = job.waited < settings.intake.pair_wait;
        let (bytes, stamp) = match open::read(&root.join(&job.seen.path), cap) {
            Ok(read) => read,
            Err(open::NotRead::Changed | open::NotRead::Gone) => return Step::Later,
            Err(error) if error.is_passing() && patient => return Step::Later,
            Err(error) => {
                return Step::Ended(held(
                    job.seen.clone(),
                    None,
                    What::Unknown,
                    &error.to_string(),
                ));
            }
        };
        if stamp != job.seen.stamp {
            return Step::Later;
        }
        let hash = ContentHash::of(&bytes);
        let whole = hash.clone();
        let kind = reading::kind(&bytes);
        let mut opened = Opened {
            seen: job.seen.clone(),
            bytes,
            kind,
            hash,
            beside: Vec::new(),
            list: None,
            whole,
        };
        let Ok(kind) = opened.kind else { return Step::Opened(Box::new(opened)) };
        let names = match reading::companions(kind, &opened.bytes) {
            Ok(names) => names,
            Err(error) => {
                return Step::Ended(held(
                    opened.seen,
                    Some(opened.hash),
                    What::Tracing,
                    &error.to_string(),
                ));
            }
        };
        for name in names {
            match self.beside(root, &opened.seen.path, &name, cap, now) {
                Ok(beside) => opened.beside.push(beside),
                Err(_) if patient => return Step::Later,
                Err(reason) => {
                    return Step::Ended(held(
                        opened.seen,
                        Some(opened.hash),
                        What::Tracing,
                        &reason,
                    ));
                }
            }
        }
        if !opened.beside.is_empty() {
            let mut list = format!("{}\n", opened.hash);
            for Beside { hash, .. } in &opened.beside {
                list.push_str(&format!("{hash}\n"));
            }
            opened.whole = ContentHash::of(list.as_bytes());
            opened.list = Some(list);
        }
        Step::Opened(Box::new(opened))
    }

    /// Opens a file that another one names.
    fn beside(
        &self,
        root: &Path,
        header: &Path,
        name: &str,
        cap: u64,
        now: Duration,
    ) -> Result<Beside, String> {
        let path = header.with_file_name(name);
        let (bytes, stamp) = open::read(&root.join(&path), cap)
            .map_err(|error| format!("names a sample file that {error}; export both"))?;
        if self.settling.has_settled(&path, stamp, now) == Some(false) {
            return Err("names a sample file that does not stop changing".to_owned());
        }
        let hash = ContentHash::of(&bytes);
        Ok(Beside { name: name.to_owned(), seen: Seen { path, stamp }, bytes, hash })
    }
}

/// How many jobs make the next portion.
fn length(jobs: &[Job]) -> usize {
    let mut bytes = 0;
    let fit = jobs.iter().take(FILES).take_while(|job| {
        bytes += job.seen.stamp.size;
        bytes <= BYTES
    });
    fit.count().max(1)
}

fn paths(arrival: &Arrival) -> Vec<PathBuf> {
    let companions = arrival.companions.iter().map(|(seen, _)| seen.path.clone());
    std::iter::once(arrival.seen.path.clone()).chain(companions).collect()
}

fn held(seen: Seen, hash: Option<ContentHash>, what: What, reason: &str) -> Arrival {
    Arrival {
        seen,
        hash,
        companions: Vec::new(),
        reading: Reading::Held(what, Held(reason.to_owned())),
    }
}

/// Reads and measures what was opened, and keeps its bytes. `None`: not yet.
fn read(
    opened: Opened,
    known: bool,
    waited_out: bool,
    site: &ebbmark_formats::Site,
    contents: &Contents,
    now: At,
) -> Result<Option<Arrival>, StoreError> {
    let Opened { seen, bytes, kind, hash, beside, list, whole } = opened;
    let reading = if known {
        Reading::Repeat
    } else {
        let beside: Vec<(String, &[u8])> =
            beside.iter().map(|one| (one.name.clone(), one.bytes.as_slice())).collect();
        match content(kind, &bytes, &beside, site, &whole, now) {
            Ok(reading) => reading,
            Err(Unread::Format(Error::NotYet(_))) if !waited_out => return Ok(None),
            Err(error) => Reading::Held(What::Unknown, Held(error.to_string())),
        }
    };
    if !matches!(reading, Reading::Repeat) {
        contents.keep(&hash, &bytes)?;
        for one in &beside {
            contents.keep(&one.hash, &one.bytes)?;
        }
        if let Some(list) = &list {
            contents.keep(&whole, list.as_bytes())?;
        }
    }
    let companions = beside.into_iter().map(|one| (one.seen, one.hash)).collect();
    Ok(Some(Arrival { seen, hash: Some(whole), companions, reading }))
}

fn content(
    kind: Result<Kind, Unread>,
    bytes: &[u8],
    beside: &[(String, &[u8])],
    site: &ebbmark_formats::Site,
    hash: &ContentHash,
    now: At,
) -> Result<Reading, Unread> {
    match reading::content(kind?, bytes, beside, site)? {
        // By hand such a file can be measured; on a ward nobody should have to remember that amplitudes are unknown.
        Content::Tracing(tracing) if !tracing.calibrated => Err(Unread::NotCalibrated),
        Content::Tracing(tracing) => {
            let measurement = reading::measured(&tracing, &Options::default())?;
            Ok(facts::tracing(*tracing, &measurement, hash, now))
        }
        Content::Chart(chart) => Ok(facts::chart(chart, hash)),
    }
}
