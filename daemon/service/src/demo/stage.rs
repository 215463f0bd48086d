//! The folder that the story is played in: settings, rule books, and where the hospital's exports arrive.

use super::play::DemoError;
use crate::store::StorePath;
use ebbmark_demo_ward::story::{Export, Story};
use std::io::Write;
use std::path::{Path, PathBuf};

/// A folder that is ready to be played in.
#[derive(Debug, Clone)]
pub struct Stage {
    folder: PathBuf,
}

/// The shipped examples: the demo is decided by what a hospital starts from.
const PROTOCOL: &str = include_str!("../../../../config/protocol.toml");
const MEDICINES: &str = include_str!("../../../../config/medicines.toml");

impl Stage {
    /// Makes what is not there yet.
    ///
    /// # Errors
    /// The folder can't be written.
    pub fn set(folder: &Path, story: &Story) -> Result<Self, DemoError> {
        let folder = std::path::absolute(folder).map_err(DemoError::folder("find the folder"))?;
        let stage = Self { folder };
        for part in [stage.export(), stage.carts()] {
            std::fs::create_dir_all(part).map_err(DemoError::folder("make the demo's folders"))?;
        }
        let settings = format!(
            r#"# The settings of a demo with invented people.
[site]
name = "{} (DEMO: invented people)"
zone = "Europe/London"
issuer = "{}"

[folders]
export = "export"
store = "store"
protocol = "protocol.toml"
medicines = "medicines.toml"
least_free_mib = 1

[intake]
settle_ms = 100
scan_every_s = 1

[mail]
by = "folder"
from = "ebbmark-demo@saltmarsh.example"
folder = {{ path = "mail" }}
"#,
            story.hospital, story.issuer
        );
        for (name, text) in [
            ("protocol.toml", PROTOCOL),
            ("medicines.toml", MEDICINES),
            ("ebbmark.toml", settings.as_str()),
        ] {
            let path = stage.folder.join(name);
            if !path.exists() {
                std::fs::write(path, text)
                    .map_err(DemoError::folder("write the demo's settings"))?;
            }
        }
        Ok(stage)
    }

    /// The settings file.
    pub fn settings_file(&self) -> PathBuf {
        self.folder.join("ebbmark.toml")
    }

    /// Where the store is.
    pub fn store(&self) -> StorePath {
        StorePath::new(self.folder.join("store"))
    }

    /// Where messages are written.
    pub fn mail(&self) -> PathBuf {
        self.folder.join("mail")
    }

    /// Where the hospital's files arrive.
    pub fn export(&self) -> PathBuf {
        self.folder.join("export")
    }

    /// Where a file is written before it is moved into the export folder in one go.
    fn carts(&self) -> PathBuf {
        self.folder.join("carts")
    }

    /// Whether a file has been exported.
    pub(super) fn has(&self, export: &Export) -> bool {
        self.export().join(&export.name).exists()
    }

    /// Exports a file, as a hospital's interface does.
    pub(super) fn drop_in(&self, export: &Export) -> Result<(), DemoError> {
        let bytes = export.bytes()?;
        let draft = self.carts().join(&export.name);
        let fail = || DemoError::folder("export a file");
        let mut file = std::fs::File::create(&draft).map_err(fail())?;
        file.write_all(&bytes).and_then(|()| file.sync_all()).map_err(fail())?;
        std::fs::rename(draft, self.export().join(&export.name)).map_err(fail())
    }
}
