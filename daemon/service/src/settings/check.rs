//! From the settings as written to checked settings. Gathers everything that is wrong, not only the first thing.

use super::raw::{self, Raw};
use super::{
    Codes, Daily, Folders, Intake, Mail, MailBy, Problems, Secret, Settings, SignIn, Site, Smtp,
    Tls, Words,
};
use chrono::NaiveTime;
use ebbmark_rules::finding::Finding;
use ebbmark_rules::ids::Private;
use std::ops::RangeInclusive;
use std::path::{Path, PathBuf};
use std::time::Duration;
use toml::Spanned;

/// A number's bounds and what it is when it isn't written; the error text is made of them.
struct Bound {
    key: &'static str,
    range: RangeInclusive<u64>,
    default: u64,
}

const SETTLE_MS: Bound = Bound { key: "settle_ms", range: 100..=600_000, default: 3_000 };
const SCAN_EVERY_S: Bound = Bound { key: "scan_every_s", range: 1..=600, default: 20 };
const PAIR_WAIT_S: Bound = Bound { key: "pair_wait_s", range: 1..=86_400, default: 600 };
const LARGEST_FILE_MIB: Bound = Bound { key: "largest_file_mib", range: 1..=1_024, default: 64 };
const LEAST_FREE_MIB: Bound = Bound { key: "least_free_mib", range: 1..=1_048_576, default: 2_048 };
const WORKERS: Bound = Bound { key: "workers", range: 1..=256, default: 1 };
const PORT: Bound = Bound { key: "port", range: 1..=65_535, default: 587 };
const ATTEMPT_S: Bound = Bound { key: "attempt_s", range: 1..=600, default: 90 };

pub(super) fn check(file: &Path, text: &str) -> Result<Settings, Problems> {
    let raw: Raw = toml::from_str(text).map_err(|error| {
        let finding = Finding::of_toml(text, &error);
        let finding = match similar(error.message()) {
            Some(hint) => finding.hint(hint),
            None => finding,
        };
        Problems::of(file, &[finding])
    })?;
    let mut check = Check { text, base: file.parent().unwrap_or(Path::new("")), found: Vec::new() };
    let settings = check.settings(raw);
    match settings {
        Some(settings) if check.found.is_empty() => Ok(settings),
        _ => Err(Problems::of(file, &check.found)),
    }
}

/// ``unknown field `setle_ms`, expected one of `settle_ms`, …`` → a hint with the nearest name.
fn similar(message: &str) -> Option<String> {
    let mut names = message.split('`').skip(1).step_by(2);
    let wrong = names.next().filter(|_| message.starts_with("unknown field"))?;
    let nearest = names.min_by_key(|name| distance(wrong, name))?;
    (distance(wrong, nearest) <= wrong.len().div_ceil(3))
        .then(|| format!("did you mean `{nearest}`?"))
}

/// Edits between two names (Levenshtein).
fn distance(a: &str, b: &str) -> usize {
    let mut row: Vec<usize> = (0..=b.len()).collect();
    for (i, from) in a.bytes().enumerate() {
        let mut corner = i;
        let mut left = i + 1;
        for (above, to) in row.iter_mut().skip(1).zip(b.bytes()) {
            let here = (corner + usize::from(from != to)).min(left + 1).min(*above + 1);
            corner = std::mem::replace(above, here);
            left = here;
        }
        if let Some(first) = row.first_mut() {
            *first = i + 1;
        }
    }
    row.last().copied().unwrap_or(a.len())
}

fn is_address(text: &str) -> bool {
    let whole =
        text.split_once('@').is_some_and(|(name, domain)| !name.is_empty() && !domain.is_empty());
    whole && !text.contains(char::is_whitespace)
}

struct Check<'a> {
    text: &'a str,
    base: &'a Path,
    found: Vec<Finding>,
}

impl Check<'_> {
    fn settings(&mut self, raw: Raw) -> Option<Settings> {
        let site = self.site(&raw.site);
        let folders = self.folders(&raw.folders);
        let intake = self.intake(&raw.intake);
        let mail = self.mail(&raw.mail);
        let codes = Codes::default();
        let settings = Settings { site: site?, folders: folders?, intake, mail: mail?, codes };
        let (export, store) = (&settings.folders.export, &settings.folders.store);
        if export.starts_with(store) || store.starts_with(export) {
            self.wrong_hint(
                &raw.folders.store,
                "the store and the export folder lie within each other",
                "the export folder is never written to, so the store needs a folder of its own",
            );
        }
        Some(settings)
    }

    fn wrong<T>(&mut self, value: &Spanned<T>, what: impl Into<String>) {
        self.found.push(Finding::at(self.text, value.span().start, what));
    }

    fn wrong_hint<T>(&mut self, value: &Spanned<T>, what: impl Into<String>, hint: &str) {
        self.found.push(Finding::at(self.text, value.span().start, what).hint(hint));
    }

    fn filled(&mut self, value: &Spanned<String>, key: &str) -> Option<String> {
        let text = value.get_ref().trim();
        if text.is_empty() {
            self.wrong(value, format!("`{key}` is empty"));
            return None;
        }
        Some(text.to_owned())
    }

    fn path(&mut self, value: &Spanned<String>, key: &str) -> Option<PathBuf> {
        self.filled(value, key).map(|path| self.base.join(path))
    }

    fn number(&mut self, value: Option<&Spanned<u64>>, bound: &Bound) -> u64 {
        let Some(value) = value else { return bound.default };
        let number = *value.get_ref();
        if bound.range.contains(&number) {
            return number;
        }
        let (low, high) = (bound.range.start(), bound.range.end());
        self.wrong(value, format!("`{}` is {number}; {low} to {high} is expected", bound.key));
        bound.default
    }

    fn site(&mut self, raw: &raw::Site) -> Option<Site> {
        let name = self.filled(&raw.name, "name");
        let issuer = self.filled(&raw.issuer, "issuer");
        let zone = match raw.zone.get_ref().parse() {
            Ok(zone) => Some(zone),
            Err(_) => {
                self.wrong_hint(
                    &raw.zone,
                    format!("`zone` is `{}`, which is no time zone", raw.zone.get_ref()),
                    "write it like `Europe/Lisbon`, as in the time-zone database",
                );
                None
            }
        };
        Some(Site { name: name?, zone: zone?, issuer: issuer? })
    }

    fn folders(&mut self, raw: &raw::Folders) -> Option<Folders> {
        let export = self.path(&raw.export, "export");
        let store = self.path(&raw.store, "store");
        let protocol = self.path(&raw.protocol, "protocol");
        let medicines = self.path(&raw.medicines, "medicines");
        let codes = match &raw.codes {
            Some(value) => Some(self.path(value, "codes")?),
            None => None,
        };
        let marker = match &raw.marker {
            Some(value) => {
                let name = self.filled(value, "marker")?;
                if Path::new(&name).components().count() != 1 || name.contains("..") {
                    self.wrong(
                        value,
                        "`marker` is the name of a file within the export folder, without a path",
                    );
                }
                Some(PathBuf::from(name))
            }
            None => None,
        };
        let least_free = self.number(raw.least_free_mib.as_ref(), &LEAST_FREE_MIB) << 20;
        Some(Folders {
            export: export?,
            store: store?,
            protocol: protocol?,
            medicines: medicines?,
            codes,
            marker,
            least_free,
        })
    }

    fn intake(&mut self, raw: &raw::Intake) -> Intake {
        let workers = raw.workers.as_ref().map(|value| self.number(Some(value), &WORKERS));
        Intake {
            settle: Duration::from_millis(self.number(raw.settle_ms.as_ref(), &SETTLE_MS)),
            scan_every: Duration::from_secs(self.number(raw.scan_every_s.as_ref(), &SCAN_EVERY_S)),
            pair_wait: Duration::from_secs(self.number(raw.pair_wait_s.as_ref(), &PAIR_WAIT_S)),
            largest_file: self.number(raw.largest_file_mib.as_ref(), &LARGEST_FILE_MIB) << 20,
            workers: workers.and_then(|count| usize::try_from(count).ok()),
        }
    }

    fn mail(&mut self, raw: &raw::Mail) -> Option<Mail> {
        let from = self.filled(&raw.from, "from")?;
        if !is_address(&from) {
            self.wrong_hint(
                &raw.from,
                format!("`from` is `{from}`, which is no mail address"),
                "a bare address is expected, like `ebbmark@hospital.example`",
            );
        }
        let by = match (raw.by.get_ref().as_str(), &raw.smtp, &raw.folder) {
            ("smtp", Some(smtp), None) => MailBy::Smtp(self.smtp(smtp.get_ref())?),
            ("folder", None, Some(folder)) => {
                MailBy::Folder(self.path(&folder.get_ref().path, "path")?)
            }
            ("memory", None, None) => MailBy::Memory,
            ("smtp", None, _) => {
                return self.no(&raw.by, "`by` is `smtp`, but there is no [mail.smtp]");
            }
            ("folder", _, None) => {
                return self.no(&raw.by, "`by` is `folder`, but there is no [mail.folder]");
            }
            ("smtp" | "memory", _, Some(extra)) => {
                return self.no(extra, "[mail.folder] stands here, but `by` says otherwise");
            }
            ("folder" | "memory", Some(extra), _) => {
                return self.no(extra, "[mail.smtp] stands here, but `by` says otherwise");
            }
            (other, ..) => {
                let what = format!("`by` is `{other}`; `smtp`, `folder` or `memory` is expected");
                return self.no(&raw.by, &what);
            }
        };
        let mut words = Words::default();
        if let Some(answer) = &raw.words.answer {
            words.answer = self.filled(answer, "answer")?;
        }
        if let Some(sign_off) = &raw.words.sign_off {
            words.sign_off = sign_off.get_ref().trim().to_owned();
        }
        let daily = match &raw.daily {
            Some(daily) => Some(self.daily(daily)?),
            None => None,
        };
        let names = raw.names.as_ref().is_some_and(|names| *names.get_ref());
        Some(Mail { from, names, by, words, daily })
    }

    fn daily(&mut self, raw: &raw::Daily) -> Option<Daily> {
        let Ok(at) = NaiveTime::parse_from_str(raw.at.get_ref(), "%H:%M") else {
            let what = format!("`at` is `{}`; a time like `07:00` is expected", raw.at.get_ref());
            return self.no(&raw.at, &what);
        };
        for to in &raw.to {
            if !is_address(to.get_ref()) {
                self.wrong(to, format!("`{}` is no mail address", to.get_ref()));
            }
        }
        let to = raw.to.iter().map(|to| Private::new(to.get_ref().as_str())).collect();
        Some(Daily { at, to })
    }

    fn no<T, U>(&mut self, value: &Spanned<T>, what: &str) -> Option<U> {
        self.wrong(value, what);
        None
    }

    fn smtp(&mut self, raw: &raw::Smtp) -> Option<Smtp> {
        let host = self.filled(&raw.host, "host");
        let port = self.number(raw.port.as_ref(), &PORT);
        let tls = match raw.tls.as_ref().map(|tls| tls.get_ref().as_str()) {
            None | Some("starttls") => Tls::StartTls,
            Some("wrapped") => Tls::Wrapped,
            Some("plain") => Tls::Plain,
            Some(other) => {
                let what =
                    format!("`tls` is `{other}`; `starttls`, `wrapped` or `plain` is expected");
                return raw.tls.as_ref().and_then(|value| self.no(value, &what));
            }
        };
        let ca_file = match &raw.ca_file {
            Some(value) => Some(self.path(value, "ca_file")?),
            None => None,
        };
        let sign_in = match &raw.user {
            Some(user) => Some(self.sign_in(user, raw)?),
            None => {
                if let Some(value) = raw.password_file.as_ref().or(raw.password_credential.as_ref())
                {
                    self.wrong(value, "a password stands here without a `user`");
                }
                None
            }
        };
        if let (Tls::Plain, Some(_), Some(user)) = (tls, &sign_in, &raw.user) {
            self.wrong_hint(
                user,
                "signing in without TLS would send the password in the clear",
                "set `tls` to `starttls` or `wrapped`, or leave `user` out",
            );
        }
        if let (Tls::Plain, Some(host)) = (tls, &host) {
            let is_here = host == "localhost"
                || host.parse::<std::net::IpAddr>().is_ok_and(|address| address.is_loopback());
            if !is_here {
                self.wrong_hint(
                    &raw.host,
                    format!("`tls` is `plain`, but `{host}` is not this machine"),
                    "set `tls` to `starttls` or `wrapped`: messages speak of patients",
                );
            }
        }
        let attempt = Duration::from_secs(self.number(raw.attempt_s.as_ref(), &ATTEMPT_S));
        Some(Smtp { host: host?, port: u16::try_from(port).ok()?, tls, ca_file, sign_in, attempt })
    }

    fn sign_in(&mut self, user: &Spanned<String>, raw: &raw::Smtp) -> Option<SignIn> {
        let (value, path) = match (&raw.password_file, &raw.password_credential) {
            (Some(value), None) => (value, self.path(value, "password_file")?),
            (None, Some(value)) => match std::env::var_os("CREDENTIALS_DIRECTORY") {
                Some(folder) => (value, Path::new(&folder).join(value.get_ref())),
                None => {
                    self.wrong_hint(value, "`password_credential` is set, but the service was started without credentials", "let systemd pass it with `LoadCredential=`, or use `password_file`");
                    return None;
                }
            },
            _ => {
                return self
                    .no(user, "`user` needs either `password_file` or `password_credential`");
            }
        };
        match std::fs::read_to_string(&path) {
            Ok(text) => Some(SignIn {
                user: self.filled(user, "user")?,
                password: Secret::new(text.trim_end_matches(['\r', '\n'])),
            }),
            Err(error) => self
                .no(value, &format!("the password can't be read from {}: {error}", path.display())),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const GOOD: &str = r#"
[site]
name = "St Brannock's"
zone = "Europe/Lisbon"
issuer = "brannock"
[folders]
export = "export"
store = "store"
protocol = "protocol.toml"
medicines = "medicines.toml"
[intake]
settle_ms = 2000
[mail]
by = "folder"
from = "ebbmark@brannock.example"
folder = { path = "mail" }
"#;

    fn problems(text: &str) -> String {
        check(Path::new("etc/ebbmark.toml"), text).unwrap_err().to_string()
    }

    #[test]
    fn paths_count_from_the_settings_file() {
        let settings = check(Path::new("etc/ebbmark.toml"), GOOD).unwrap();
        assert_eq!(settings.folders.export, Path::new("etc/export"));
        assert_eq!(settings.intake.settle, Duration::from_secs(2));
        assert_eq!(settings.intake.scan_every, Duration::from_secs(20));
        assert_eq!(settings.mail.by, MailBy::Folder("etc/mail".into()));
    }

    /// Each mistake on its own: what is replaced, by what, and the message that a person gets.
    #[test]
    fn each_mistake_is_named_with_its_place() {
        let table: &[(&str, &str, &str)] = &[
            ("settle_ms = 2000", "setle_ms = 2000", "line 12, column 1: unknown field `setle_ms`"),
            ("settle_ms = 2000", "setle_ms = 2000", "hint: did you mean `settle_ms`?"),
            (
                "settle_ms = 2000",
                "settle_ms = 5",
                "line 12, column 13: `settle_ms` is 5; 100 to 600000 is expected",
            ),
            (
                "settle_ms = 2000",
                "settle_ms = \"2 s\"",
                "line 12, column 13: expected a whole number of 0 or more, found \"2 s\"",
            ),
            (
                "Europe/Lisbon",
                "Europe/Atlantis",
                "line 4, column 8: `zone` is `Europe/Atlantis`, which is no time zone",
            ),
            ("\"brannock\"", "\" \"", "line 5, column 10: `issuer` is empty"),
            (
                "store = \"store\"",
                "store = \"export/store\"",
                "line 8, column 9: the store and the export folder lie within each other",
            ),
            ("medicines = \"medicines.toml\"\n", "", "missing field `medicines`"),
            (
                "by = \"folder\"",
                "by = \"pigeon\"",
                "line 14, column 6: `by` is `pigeon`; `smtp`, `folder` or `memory` is expected",
            ),
            (
                "by = \"folder\"",
                "by = \"smtp\"",
                "line 14, column 6: `by` is `smtp`, but there is no [mail.smtp]",
            ),
            (
                "by = \"folder\"",
                "by = \"memory\"",
                "line 16, column 10: [mail.folder] stands here, but `by` says otherwise",
            ),
            (
                "ebbmark@brannock.example",
                "ebbmark",
                "line 15, column 8: `from` is `ebbmark`, which is no mail address",
            ),
            (
                "folder = { path = \"mail\" }",
                "folder = { path = \"mail\" }\ndaily = { at = \"7 am\", to = [] }",
                "line 17, column 16: `at` is `7 am`; a time like `07:00` is expected",
            ),
            (
                "folder = { path = \"mail\" }",
                "folder = { path = \"mail\" }\ndaily = { at = \"07:00\", to = [\"keeper\"] }",
                "line 17, column 31: `keeper` is no mail address",
            ),
            ("[mail]", "[mail", "line 13, column 6: "),
        ];
        for (from, to, expected) in table {
            assert!(GOOD.contains(from), "{from}");
            let found = problems(&GOOD.replace(from, to));
            assert!(found.contains(expected), "{to}: {found}");
        }
    }

    #[test]
    fn all_mistakes_come_at_once() {
        let text = GOOD
            .replace("Europe/Lisbon", "x")
            .replace("= 2000", "= 1")
            .replace("ebbmark@brannock", "a b@c");
        assert_eq!(problems(&text).lines().filter(|line| line.contains("line ")).count(), 3);
    }

    #[test]
    fn messages_in_the_clear_stay_on_this_machine() {
        let text = |host: &str| {
            GOOD.replace("by = \"folder\"", "by = \"smtp\"").replace(
                "folder = { path = \"mail\" }",
                &format!("smtp = {{ host = \"{host}\", tls = \"plain\" }}"),
            )
        };
        for here in ["localhost", "127.0.0.1", "::1"] {
            check(Path::new("ebbmark.toml"), &text(here)).unwrap();
        }
        for away in ["mail.example", "10.0.0.1", "localhost.example"] {
            assert!(problems(&text(away)).contains("is not this machine"), "{away}");
        }
    }

    #[test]
    fn password_in_the_clear_is_refused() {
        let folder = tempfile::tempdir().unwrap();
        std::fs::write(folder.path().join("password"), "sesame\n").unwrap();
        let text = |tls: &str| {
            GOOD.replace("by = \"folder\"", "by = \"smtp\"").replace(
                "folder = { path = \"mail\" }",
                &format!("smtp = {{ host = \"mail.example\", tls = \"{tls}\", user = \"u\", password_file = \"password\" }}"),
            )
        };
        let file = folder.path().join("ebbmark.toml");
        let settings = check(&file, &text("starttls")).unwrap();
        let MailBy::Smtp(smtp) = &settings.mail.by else { unreachable!("`by` is smtp") };
        assert_eq!(smtp.sign_in.as_ref().unwrap().password.expose(), "sesame");
        assert!(!format!("{settings:?}").contains("sesame"));
        assert!(check(&file, &text("plain")).unwrap_err().to_string().contains("in the clear"));
    }
}
