//! Prints a tracing's samples in µV, for comparing them with other libraries: `samples FILE`. First line: rate and lead
//! names; then one line a sample, `nan` where it is missing.

#![allow(clippy::disallowed_methods, reason = "the crate does no I/O; this example is its caller")]

use ebbmark_formats::{Companions, Content, Site, companions, read, sniff};
use std::error::Error;
use std::io::Write;

fn main() -> Result<(), Box<dyn Error>> {
    let path = std::env::args_os().nth(1).ok_or("usage: samples FILE")?;
    let path = std::path::Path::new(&path);
    let bytes = std::fs::read(path)?;
    let kind = sniff(&bytes).ok_or("nothing that is read")?;
    let names = companions(kind, &bytes)?;
    let beside = |name: &String| std::fs::read(path.with_file_name(name));
    let files = names.iter().map(beside).collect::<Result<Vec<_>, _>>()?;
    let mut with = Companions::default();
    for (name, bytes) in names.iter().zip(&files) {
        with.add(name, bytes);
    }
    let site = Site { zone: chrono_tz::UTC, issuer: "test".into(), codes: Default::default() };
    let Content::Tracing(tracing) = read(kind, &bytes, &with, &site)? else {
        return Err("no tracing".into());
    };
    let leads = tracing.recording.leads();
    let mut out = std::io::BufWriter::new(std::io::stdout().lock());
    write!(out, "{}", tracing.recording.sampling().get())?;
    for signal in leads {
        write!(out, ",{}", signal.lead)?;
    }
    writeln!(out)?;
    for sample in 0..tracing.recording.samples() {
        let values = leads
            .iter()
            .map(|signal| signal.uv.get(sample).map_or("nan".into(), |uv| format!("{uv}")));
        writeln!(out, "{}", values.collect::<Vec<_>>().join(","))?;
    }
    Ok(())
}
