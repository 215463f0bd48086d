//! Files that belong together: a header, and sample files that say nothing by themselves.

use super::scan::look;
use super::settle::Settling;
use crate::store::{Held, Seen, What};
use std::collections::BTreeSet;
use std::path::{Path, PathBuf};
use std::time::Duration;

/// A file to open.
#[derive(Debug)]
pub(super) struct Job {
    /// The file; for a sample file that came later than its header, the header.
    pub(super) seen: Seen,
    /// The sample file that led here, which the header ought to name.
    pub(super) brought_by: Option<Seen>,
    /// Known without opening it.
    pub(super) held: Option<(What, Held)>,
    /// For how long it has looked the way it does.
    pub(super) waited: Duration,
}

/// Makes jobs of settled files, in their order. A sample file waits for its header, which brings it along.
pub(super) fn plan(
    root: &Path,
    settled: Vec<Seen>,
    settling: &Settling,
    now: Duration,
    pair_wait: Duration,
) -> Vec<Job> {
    let mut headers = BTreeSet::new();
    let mut jobs = Vec::with_capacity(settled.len());
    for seen in settled {
        let waited = settling.waited(&seen.path, now).unwrap_or_default();
        let job = |seen, brought_by, held| Job { seen, brought_by, held, waited };
        if !is_samples(&seen.path) {
            jobs.push(job(seen, None, None));
            continue;
        }
        match header(root, &seen.path) {
            Some(header) if settling.waited(&header.path, now).is_some() => {}
            Some(header) if headers.insert(header.path.clone()) => {
                jobs.push(job(header, Some(seen), None))
            }
            Some(_) => {}
            None if waited >= pair_wait => {
                let reason = Held(
                    "is a sample file whose header (.hea) has not come; export both".to_owned(),
                );
                jobs.push(job(seen, None, Some((What::Tracing, reason))));
            }
            None => {}
        }
    }
    jobs
}

/// WFDB names its parts by their extension; the bytes of a sample file say nothing.
fn is_samples(path: &Path) -> bool {
    path.extension().is_some_and(|end| end.eq_ignore_ascii_case("dat"))
}

/// The header of the same name, if it is there.
fn header(root: &Path, samples: &Path) -> Option<Seen> {
    let path: PathBuf = ["hea", "HEA"]
        .iter()
        .map(|end| samples.with_extension(end))
        .find(|path| root.join(path).exists())?;
    let (stamp, _) = look(&root.join(&path))?;
    Some(Seen { path, stamp })
}
