//! From a file on disk to what it holds: the file, the files that it names beside it, the reader for its format.

use ebbmark_formats::{Companions, Content, Error, Kind, Site, TracingFile};
use ebbmark_measure::{Measurement, Options};
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::path::Path;

/// Why nothing came of a file. `Display` gives a sentence for a person, without patient text.
#[derive(Debug, thiserror::Error)]
pub enum Unread {
    /// It can't be opened or read.
    #[error("can't be read: {0}")]
    Io(std::io::Error),
    /// A file that it names is not there, or can't be read.
    #[error("names a file beside it that can't be read: {0}")]
    Companion(std::io::Error),
    /// No reader knows these bytes.
    #[error("is in no format that is read here ({bytes} bytes)")]
    Unknown {
        /// How many bytes there are.
        bytes: usize,
    },
    /// Nothing is in it.
    #[error("is empty")]
    Empty,
    /// The reader's own reason.
    #[error(transparent)]
    Format(#[from] Error),
    /// Its numbers mean no stated voltage.
    #[error("does not state its gain, so what its numbers mean in volts is not known")]
    NotCalibrated,
    /// It holds chart rows.
    #[error("holds chart rows, not a tracing")]
    NotATracing,
    /// The reader or the engine failed in a way that it should not.
    #[error("made the reader fail; this is a fault of the program, please report it")]
    Fault,
}

/// Recognises bytes.
///
/// # Errors
/// There are none, or no reader knows them.
pub fn kind(bytes: &[u8]) -> Result<Kind, Unread> {
    if bytes.is_empty() {
        return Err(Unread::Empty);
    }
    guarded(|| ebbmark_formats::sniff(bytes))?.ok_or(Unread::Unknown { bytes: bytes.len() })
}

/// The plain names of the files that belong to this one.
///
/// # Errors
/// The bytes name none although they should, or name one that lies elsewhere.
pub fn companions(kind: Kind, bytes: &[u8]) -> Result<Vec<String>, Unread> {
    let names = guarded(|| ebbmark_formats::companions(kind, bytes))??;
    if names.iter().any(|name| Path::new(name).components().count() != 1 || name.contains("..")) {
        return Err(Error::Hold("names a file that does not lie beside it".to_owned()).into());
    }
    Ok(names)
}

/// Reads bytes whose companions are at hand.
///
/// # Errors
/// The reader's own reasons.
pub fn content(
    kind: Kind,
    bytes: &[u8],
    beside: &[(String, &[u8])],
    site: &Site,
) -> Result<Content, Unread> {
    let mut companions = Companions::default();
    for (name, bytes) in beside {
        companions.add(name, bytes);
    }
    Ok(guarded(|| ebbmark_formats::read(kind, bytes, &companions, site))??)
}

/// Reads a file named on the command line, with the files that it names beside it.
///
/// # Errors
/// See [`Unread`].
pub fn file(path: &Path, site: &Site) -> Result<Content, Unread> {
    let bytes = std::fs::read(path).map_err(Unread::Io)?;
    let kind = kind(&bytes)?;
    let folder = path.parent().unwrap_or(Path::new(""));
    let mut beside = Vec::new();
    for name in companions(kind, &bytes)? {
        let bytes = std::fs::read(folder.join(&name)).map_err(Unread::Companion)?;
        beside.push((name, bytes));
    }
    let beside: Vec<(String, &[u8])> =
        beside.iter().map(|(name, bytes)| (name.clone(), bytes.as_slice())).collect();
    content(kind, &bytes, &beside, site)
}

/// Measures a tracing.
///
/// # Errors
/// The engine failed in a way that it should not.
pub fn measured(tracing: &TracingFile, options: &Options) -> Result<Measurement, Unread> {
    guarded(|| ebbmark_measure::measure(&tracing.recording, options))
}

/// One file that makes a reader panic must not take the others with it.
fn guarded<T>(work: impl FnOnce() -> T) -> Result<T, Unread> {
    catch_unwind(AssertUnwindSafe(work)).map_err(|_| Unread::Fault)
}
