//! A house to test in: a folder with settings, an export folder and a store, and a service that may run in it.

use ebbmark::clock::Clock;
use ebbmark::service::{Service, Setup};
use ebbmark::settings::Settings;
use ebbmark::store::{FileRow, Reader, StorePath};
use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};

pub(crate) struct House {
    folder: tempfile::TempDir,
}

/// Waiting for a state never takes this long unless it never comes.
const PATIENCE: Duration = Duration::from_secs(60);

impl House {
    pub(crate) fn new() -> Self {
        let house = Self { folder: tempfile::tempdir().unwrap() };
        std::fs::create_dir(house.export()).unwrap();
        // The shipped examples: the service is tested on what a hospital starts from.
        for name in ["medicines.toml", "protocol.toml"] {
            let example = Path::new(env!("CARGO_MANIFEST_DIR")).join("../../config").join(name);
            std::fs::copy(example, house.path().join(name)).unwrap();
        }
        house.write("ebbmark.toml", SETTINGS);
        house
    }

    pub(crate) fn path(&self) -> &Path {
        self.folder.path()
    }

    pub(crate) fn export(&self) -> PathBuf {
        self.path().join("export")
    }

    /// Puts a whole file in the export folder, as a careful exporter does: under another name first.
    pub(crate) fn export_file(&self, name: &str, text: impl AsRef<[u8]>) {
        let draft = self.export().join(format!(".{name}.draft"));
        std::fs::write(&draft, text).unwrap();
        std::fs::rename(draft, self.export().join(name)).unwrap();
    }

    pub(crate) fn settings_file(&self) -> PathBuf {
        self.path().join("ebbmark.toml")
    }

    pub(crate) fn write(&self, name: &str, text: impl AsRef<[u8]>) {
        std::fs::write(self.path().join(name), text).unwrap();
    }

    /// Changes a line of the settings.
    pub(crate) fn set(&self, from: &str, to: &str) {
        let text = std::fs::read_to_string(self.settings_file()).unwrap();
        assert!(text.contains(from), "{from} stands in the settings");
        self.write("ebbmark.toml", text.replace(from, to));
    }

    pub(crate) fn store(&self) -> StorePath {
        StorePath::new(self.path().join("store"))
    }

    pub(crate) async fn start(&self) -> Service {
        self.start_at(Clock::System).await
    }

    pub(crate) async fn start_at(&self, clock: Clock) -> Service {
        let settings = Settings::read(&self.settings_file()).unwrap();
        Service::start(Setup {
            settings_file: self.settings_file(),
            clock,
            render: ebbmark::mail::renderer(&settings),
            settings,
        })
        .await
        .unwrap()
    }

    /// How many files ended in this outcome.
    pub(crate) fn count(&self, outcome: &str) -> u64 {
        Reader::open(&self.store())
            .and_then(|reader| reader.file_counts())
            .unwrap()
            .get(outcome)
            .copied()
            .unwrap_or(0)
    }

    /// Waits until so many files ended in this outcome.
    pub(crate) fn wait(&self, outcome: &str, count: u64) {
        let until = Instant::now() + PATIENCE;
        while self.count(outcome) < count {
            assert!(
                Instant::now() < until,
                "{} of {count} files are {outcome}: {:?}",
                self.count(outcome),
                self.held()
            );
            std::thread::sleep(Duration::from_millis(20));
        }
    }

    /// The messages in the mail folder, oldest first.
    pub(crate) fn mails(&self) -> Vec<String> {
        let Ok(entries) = std::fs::read_dir(self.path().join("mail")) else { return Vec::new() };
        let mut paths: Vec<_> = entries.map(|entry| entry.unwrap().path()).collect();
        paths.retain(|path| path.extension().is_some_and(|end| end == "eml"));
        paths.sort();
        paths.iter().map(|path| std::fs::read_to_string(path).unwrap()).collect()
    }

    /// How many messages went to a recipient.
    pub(crate) fn mails_to(&self, recipient: &str) -> usize {
        self.mails().iter().filter(|mail| mail.contains(&format!("To: {recipient}@"))).count()
    }

    /// Waits until so many messages went to a recipient.
    pub(crate) fn wait_mails_to(&self, recipient: &str, count: usize) {
        let until = Instant::now() + PATIENCE;
        while self.mails_to(recipient) < count {
            assert!(
                Instant::now() < until,
                "{} of {count} messages to {recipient}",
                self.mails_to(recipient)
            );
            std::thread::sleep(Duration::from_millis(20));
        }
    }

    /// What is held: names and reasons, by name.
    pub(crate) fn held(&self) -> Vec<(String, String)> {
        let held = Reader::open(&self.store()).and_then(|reader| reader.held()).unwrap();
        let mut held: Vec<_> = held
            .into_iter()
            .map(|FileRow { path, reason, .. }| (path.display().to_string(), reason))
            .collect();
        held.sort();
        held
    }
}

const SETTINGS: &str = r#"
[site]
name = "Saltmarsh Hospital"
zone = "Europe/London"
issuer = "saltmarsh"
[folders]
export = "export"
store = "store"
protocol = "protocol.toml"
medicines = "medicines.toml"
least_free_mib = 1
[intake]
settle_ms = 100
scan_every_s = 1
pair_wait_s = 2
largest_file_mib = 8
[mail]
by = "folder"
from = "ebbmark@saltmarsh.example"
folder = { path = "mail" }
"#;
