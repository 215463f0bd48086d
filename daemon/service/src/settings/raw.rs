//! The settings file as written: every value with its place, nothing checked yet.

use serde::Deserialize;
use toml::Spanned;

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Raw {
    pub(super) site: Site,
    pub(super) folders: Folders,
    #[serde(default)]
    pub(super) intake: Intake,
    pub(super) mail: Mail,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Site {
    pub(super) name: Spanned<String>,
    pub(super) zone: Spanned<String>,
    pub(super) issuer: Spanned<String>,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Folders {
    pub(super) export: Spanned<String>,
    pub(super) store: Spanned<String>,
    pub(super) protocol: Spanned<String>,
    pub(super) medicines: Spanned<String>,
    pub(super) codes: Option<Spanned<String>>,
    pub(super) marker: Option<Spanned<String>>,
    pub(super) least_free_mib: Option<Spanned<u64>>,
}

#[derive(Debug, Default, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Intake {
    pub(super) settle_ms: Option<Spanned<u64>>,
    pub(super) scan_every_s: Option<Spanned<u64>>,
    pub(super) pair_wait_s: Option<Spanned<u64>>,
    pub(super) largest_file_mib: Option<Spanned<u64>>,
    pub(super) workers: Option<Spanned<u64>>,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Mail {
    pub(super) by: Spanned<String>,
    pub(super) from: Spanned<String>,
    pub(super) names: Option<Spanned<bool>>,
    pub(super) smtp: Option<Spanned<Smtp>>,
    pub(super) folder: Option<Spanned<Folder>>,
    #[serde(default)]
    pub(super) words: Words,
    pub(super) daily: Option<Daily>,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Daily {
    pub(super) at: Spanned<String>,
    pub(super) to: Vec<Spanned<String>>,
}

#[derive(Debug, Default, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Words {
    pub(super) answer: Option<Spanned<String>>,
    pub(super) sign_off: Option<Spanned<String>>,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Smtp {
    pub(super) host: Spanned<String>,
    pub(super) port: Option<Spanned<u64>>,
    pub(super) tls: Option<Spanned<String>>,
    pub(super) ca_file: Option<Spanned<String>>,
    pub(super) user: Option<Spanned<String>>,
    pub(super) password_file: Option<Spanned<String>>,
    pub(super) password_credential: Option<Spanned<String>>,
    pub(super) attempt_s: Option<Spanned<u64>>,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Folder {
    pub(super) path: Spanned<String>,
}
