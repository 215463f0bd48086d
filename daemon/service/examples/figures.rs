//! What the service promises about time and memory, measured on this machine with the shipped rulebooks:
//!
//! ```text
//! cargo run --release -p ebbmark --example figures -- latency 50     # dropped file to queued message, after settling
//! cargo run --release -p ebbmark --example figures -- backlog 5000   # files waiting at a start: time and peak memory
//! ```

#![allow(clippy::indexing_slicing, reason = "a measuring program: places are of its own making")]

use chrono::{DateTime, TimeDelta, Utc};
use ebbmark::clock::Clock;
use ebbmark::service::{Service, Setup};
use ebbmark::settings::Settings;
use ebbmark::store::{Reader, StorePath};
use ebbmark_demo_ward::synth::{Sketch, synthesise};
use ebbmark_demo_ward::write::{Label, dicom};
use ebbmark_measure::Recording;
use std::error::Error;
use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};

type Result<T> = std::result::Result<T, Box<dyn Error>>;

/// The settle time of the measurement, taken off the latency.
const SETTLE: Duration = Duration::from_millis(500);
const PATIENTS: usize = 50;

#[tokio::main]
async fn main() -> Result<()> {
    let arguments: Vec<String> = std::env::args().skip(1).collect();
    let number = |place: usize| arguments.get(place).and_then(|text| text.parse::<usize>().ok());
    match (arguments.first().map(String::as_str), number(1)) {
        (Some("latency"), Some(drops)) => latency(drops).await,
        (Some("backlog"), Some(files)) => backlog(files).await,
        _ => Err("say `latency DROPS` or `backlog FILES`".into()),
    }
}

/// A folder to run in, gone at the end.
struct House(tempfile::TempDir);

impl House {
    fn new() -> Result<Self> {
        let house = Self(tempfile::tempdir()?);
        std::fs::create_dir(house.path("export"))?;
        let config = Path::new(env!("CARGO_MANIFEST_DIR")).join("../../config");
        for name in ["protocol.toml", "medicines.toml", "codes.toml"] {
            std::fs::copy(config.join(name), house.path(name))?;
        }
        let text = std::fs::read_to_string(config.join("ebbmark.toml"))?;
        let settle = format!("settle_ms = {}", SETTLE.as_millis());
        std::fs::write(house.path("ebbmark.toml"), text.replace("settle_ms = 3000", &settle))?;
        Ok(house)
    }

    fn path(&self, name: &str) -> PathBuf {
        self.0.path().join(name)
    }

    fn store(&self) -> StorePath {
        StorePath::new(self.path("store"))
    }

    /// Under another name first, as a careful exporter writes.
    fn export(&self, name: &str, bytes: &[u8]) -> Result<()> {
        let draft = self.path("export").join(format!(".{name}"));
        std::fs::write(&draft, bytes)?;
        std::fs::rename(draft, self.path("export").join(name))?;
        Ok(())
    }

    async fn start(&self) -> Result<Service> {
        let settings_file = self.path("ebbmark.toml");
        let settings = Settings::read(&settings_file)?;
        let render = ebbmark::mail::renderer(&settings);
        Ok(Service::start(Setup { settings, settings_file, clock: Clock::System, render }).await?)
    }

    fn accepted(&self) -> Result<u64> {
        Ok(Reader::open(&self.store())?.file_counts()?.get("accepted").copied().unwrap_or(0))
    }

    fn messages(&self) -> Result<u64> {
        Ok(Reader::open(&self.store())?.message_counts()?.values().sum())
    }
}

fn patients(count: usize, now: DateTime<Utc>) -> String {
    let at = (now - TimeDelta::days(1)).to_rfc3339();
    let mut text = "patient_id,event,at,ward,bed,sex,birth_date\n".to_owned();
    for number in 0..count {
        text += &format!(
            "{number},admit,{at},Tern,{number},,\n{number},describe,{at},,,F,1950-02-03\n"
        );
    }
    text
}

fn tracing(recording: &Recording, patient: usize, start: DateTime<Utc>) -> Vec<u8> {
    let label = Label {
        patient_id: patient.to_string(),
        issuer: "saltmarsh".to_owned(),
        sex: None,
        birth_date: None,
        start: start.fixed_offset(),
    };
    dicom(recording, &label)
}

/// Each drop is a 12-lead tracing of 10 s with a long QT, of a patient of whom nothing was told yet.
async fn latency(drops: usize) -> Result<()> {
    let house = House::new()?;
    let now = Clock::System.now();
    house.export("patients.csv", patients(drops, now).as_bytes())?;
    let service = house.start().await?;
    while house.accepted()? < 1 {
        tokio::time::sleep(Duration::from_millis(20)).await;
    }
    let mut took = Vec::with_capacity(drops);
    for number in 0..drops {
        let sketch =
            Sketch { qt_ms: 560.0, rate_per_min: 62.0, heart: number as u64, ..Sketch::default() };
        let bytes = tracing(&synthesise(&sketch)?.0, number, now);
        let before = house.messages()?;
        let began = Instant::now();
        house.export(&format!("{number}.dcm"), &bytes)?;
        while house.messages()? == before {
            tokio::time::sleep(Duration::from_millis(1)).await;
            if began.elapsed() > Duration::from_secs(60) {
                return Err(format!("drop {number} led to no message within a minute").into());
            }
        }
        took.push(began.elapsed().saturating_sub(SETTLE));
    }
    service.stop().await?;
    took.sort();
    println!(
        "dropped file to queued message, beyond {SETTLE:?} of settling, {drops} drops: median {:.0?}, 95th centile {:.0?}, worst {:.0?}",
        took[drops / 2],
        took[drops * 95 / 100],
        took[drops - 1]
    );
    Ok(())
}

async fn backlog(files: usize) -> Result<()> {
    let house = House::new()?;
    let now = Clock::System.now();
    std::fs::write(house.path("export/0-patients.csv"), patients(PATIENTS, now))?;
    let recordings = (0..20)
        .map(|heart| Ok(synthesise(&Sketch { qt_ms: 400.0, heart, ..Sketch::default() })?.0))
        .collect::<Result<Vec<_>>>()?;
    let mut bytes = 0;
    for number in 0..files {
        let start = now - TimeDelta::seconds(20 * i64::try_from(number)?);
        let file = tracing(&recordings[number % recordings.len()], number % PATIENTS, start);
        bytes += file.len();
        std::fs::write(house.path(&format!("export/{number}.dcm")), file)?;
    }
    drop(recordings);
    let before = memory("VmHWM")?;
    let began = Instant::now();
    let service = house.start().await?;
    while house.accepted()? < files as u64 + 1 {
        tokio::time::sleep(Duration::from_millis(50)).await;
        if began.elapsed() > Duration::from_secs(3600) {
            return Err(format!("{} of {files} files within an hour", house.accepted()?).into());
        }
    }
    let seconds = began.elapsed().as_secs_f64();
    service.stop().await?;
    println!(
        "{files} tracings ({} MiB) taken in within {seconds:.1} s ({:.0} a second); peak memory {} MiB ({} MiB before)",
        bytes >> 20,
        files as f64 / seconds,
        memory("VmHWM")? >> 10,
        before >> 10
    );
    Ok(())
}

/// A line of this process's own account, in KiB.
fn memory(line: &str) -> Result<u64> {
    let text = std::fs::read_to_string("/proc/self/status")?;
    let found = text.lines().find_map(|found| found.strip_prefix(line)).ok_or("no such line")?;
    Ok(found.trim_start_matches(':').trim().trim_end_matches("kB").trim().parse()?)
}
