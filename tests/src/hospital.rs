//! A hospital to test in: settings, the shipped rulebooks, an export folder, and files as a ward exports them.

use crate::PostOffice;
use ebbmark::clock::Clock;
use ebbmark::service::{Service, Setup};
use ebbmark::settings::Settings;
use ebbmark::store::{Reader, StorePath};
use ebbmark_rules::fact::At;
use std::collections::BTreeMap;
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Stdio};
use std::time::{Duration, Instant};

/// The folder of one hospital; gone when it is dropped.
#[derive(Debug)]
pub struct Hospital {
    folder: tempfile::TempDir,
}

/// No wait of a test is longer, unless what it waits for never comes.
const PATIENCE: Duration = Duration::from_secs(60);

impl Hospital {
    /// A folder with the shipped rulebooks and an empty export folder.
    pub fn new() -> Self {
        let hospital = Self { folder: tempfile::tempdir().unwrap() };
        std::fs::create_dir(hospital.path().join("export")).unwrap();
        for name in ["medicines.toml", "protocol.toml"] {
            let example = Path::new(env!("CARGO_MANIFEST_DIR")).join("../config").join(name);
            std::fs::copy(example, hospital.path().join(name)).unwrap();
        }
        hospital
    }

    /// Where it is.
    pub fn path(&self) -> &Path {
        self.folder.path()
    }

    /// Its settings file.
    pub fn settings_file(&self) -> PathBuf {
        self.path().join("ebbmark.toml")
    }

    /// Writes settings whose mail goes to this server.
    pub fn mail_by(&self, office: &PostOffice) {
        self.mail(&office.settings());
    }

    /// Writes settings with this `[mail]` part.
    pub fn mail(&self, part: &str) {
        std::fs::write(self.settings_file(), format!("{SETTINGS}{part}")).unwrap();
    }

    /// Changes words of the protocol.
    pub fn protocol(&self, from: &str, to: &str) {
        let file = self.path().join("protocol.toml");
        let text = std::fs::read_to_string(&file).unwrap();
        assert!(text.contains(from), "{from} stands in the protocol");
        std::fs::write(file, text.replace(from, to)).unwrap();
    }

    /// Starts the service within this process, on a clock of the test's choice.
    pub async fn start(&self, clock: Clock) -> Service {
        let settings = Settings::read(&self.settings_file()).unwrap();
        let render = ebbmark::mail::renderer(&settings);
        let setup = Setup { settings_file: self.settings_file(), clock, render, settings };
        Service::start(setup).await.unwrap()
    }

    /// Starts the program as a process of its own; its log goes to the file `log`.
    pub fn spawn(&self, program: &str) -> Child {
        let log = std::fs::File::options()
            .create(true)
            .append(true)
            .open(self.path().join("log"))
            .unwrap();
        Command::new(program)
            .args(["watch", "--log-json"])
            .current_dir(self.path())
            .stdout(Stdio::null())
            .stderr(log)
            .spawn()
            .unwrap()
    }

    /// Puts a whole file in the export folder, as a careful exporter does: under another name first.
    pub fn export(&self, name: &str, text: &str) {
        let folder = self.path().join("export");
        let draft = folder.join(format!(".{name}.draft"));
        std::fs::write(&draft, text).unwrap();
        std::fs::rename(draft, folder.join(name)).unwrap();
    }

    /// Exports a patient on Tern ward who is on haloperidol and whose potassium is 2.7 mmol/L: the shipped protocol
    /// calls the nurse, which is two addresses.
    pub fn export_low_potassium(&self, patient: usize, now: At) {
        let before = |minutes: i64| {
            (now - std::time::Duration::from_secs(60 * minutes.unsigned_abs())).to_rfc3339()
        };
        let (earlier, lately) = (before(60), before(20));
        self.export(
            &format!("p{patient}.csv"),
            &format!(
                "message_id,patient_id,event,at,ward,bed,sex,birth_date\n\
                 m1,{patient},admit,{earlier},Tern,{patient},,\n\
                 m2,{patient},describe,{earlier},,,F,1950-02-03\n"
            ),
        );
        self.export(
            &format!("m{patient}.csv"),
            &format!(
                "patient_id,order_id,event,name,dose,dose_unit,route,start,recorded_at\n\
                 {patient},o{patient},order,haloperidol,2.5,mg,PO,{earlier},{earlier}\n"
            ),
        );
        self.export(
            &format!("r{patient}.csv"),
            &format!(
                "patient_id,order_id,code_system,code,name,value,unit,status,collected_at,reported_at\n\
                 {patient},r{patient},LOINC,2823-3,potassium,2.7,mmol/L,F,{lately},{lately}\n"
            ),
        );
    }

    /// Its store, for reading.
    pub fn reader(&self) -> Reader {
        Reader::open(&StorePath::new(self.path().join("store"))).unwrap()
    }

    /// How many messages the outbox has in each state.
    pub fn outbox(&self) -> BTreeMap<String, u64> {
        self.reader().message_counts().unwrap()
    }

    /// Waits until the outbox is as `enough` wants it.
    pub fn wait_outbox(&self, what: &str, enough: impl Fn(&BTreeMap<String, u64>) -> bool) {
        let until = Instant::now() + PATIENCE;
        while !enough(&self.outbox()) {
            assert!(Instant::now() < until, "{what} did not come about: {:?}", self.outbox());
            std::thread::sleep(Duration::from_millis(10));
        }
    }
}

impl Default for Hospital {
    fn default() -> Self {
        Self::new()
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
"#;
