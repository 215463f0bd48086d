//! What a laboratory's code means. LOINC rows were each confirmed against at least one public source; a hospital checks
//! them against its own release. What isn't here or in the site's own file is reported, never guessed by its name.

use crate::fact::{Analyte, Specimen};
use crate::finding::Finding;
use crate::medicines::folded;
use serde::Deserialize;
use std::collections::{BTreeMap, BTreeSet};
use toml::Spanned;

/// Serum, plasma or whole blood only.
const LOINC: &[(Analyte, &[&str])] = &[
    (
        Analyte::Potassium,
        &[
            "2823-3", "6298-4", "77142-8", "32713-0", "39789-3", "39790-1", "41656-0", "12812-4",
            "12813-2", "22760-3", "75940-7",
        ],
    ),
    (Analyte::Magnesium, &["2601-3", "2593-2", "19123-9", "21377-7"]),
    (Analyte::CalciumTotal, &["2000-8", "1996-8", "17861-6", "49765-1"]),
    (
        Analyte::CalciumIonised,
        &["1995-0", "12180-6", "1994-3", "34581-9", "17863-2", "17864-0", "38230-9"],
    ),
    (Analyte::Albumin, &["1751-7"]),
    (Analyte::Creatinine, &["14682-9", "59826-8", "77140-2", "2160-0", "38483-4"]),
];

/// What looks like one of them and is another thing. Known, and passed over.
const LOOKS_ALIKE: &[(&str, &str)] = &[
    ("2828-2", "potassium in urine"),
    ("26746-8", "magnesium in red cells"),
    ("2597-3", "magnesium in red cells"),
    ("29265-6", "calcium that the laboratory has corrected for albumin"),
    ("19072-8", "ionised calcium adjusted to pH 7.4"),
    ("54347-0", "albumin in moles"),
    // From memory.
    ("1754-1", "albumin in urine"),
    ("2161-8", "creatinine in urine"),
    ("14683-7", "creatinine in urine"),
];

/// Words in a comment that say red cells burst, in a few languages, case and accents folded.
const HAEMOLYSED: [&str; 5] = ["haemoly", "hamoly", "hemoly", "emolis", "emoliz"];
/// Words that say the specimen is unreliable otherwise.
const UNRELIABLE: [&str; 4] = ["edta", "contaminat", "clotted", "drip arm"];

/// What a code stands for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Meaning {
    /// One of the analytes that rules ask about.
    Analyte(Analyte),
    /// Something else, known as such: neither a fact nor a mistake.
    LeftOut,
}

/// The built-in meaning of a code; `None` for a code that isn't known.
fn loinc(system: &str, code: &str) -> Option<Meaning> {
    let known = ["LN", "LOINC", "http://loinc.org", "urn:oid:2.16.840.1.113883.6.1"];
    if !known.iter().any(|known| known.eq_ignore_ascii_case(system.trim())) {
        return None;
    }
    let code = code.trim();
    let of = |(analyte, codes): &(Analyte, &[&str])| codes.contains(&code).then_some(*analyte);
    match LOINC.iter().find_map(of) {
        Some(analyte) => Some(Meaning::Analyte(analyte)),
        None => LOOKS_ALIKE.iter().any(|(other, _)| *other == code).then_some(Meaning::LeftOut),
    }
}

/// A site's own codes, units and words. The default one has none: what is built in still holds.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct LocalCodes {
    analytes: BTreeMap<String, (Analyte, Option<String>)>,
    left_out: BTreeSet<String>,
    units: BTreeMap<String, String>,
    leads: BTreeMap<String, String>,
    haemolysed: Vec<String>,
    unreliable: Vec<String>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct Raw {
    #[serde(default)]
    analyte: Vec<Spanned<RawAnalyte>>,
    #[serde(default)]
    left_out: Vec<RawLeftOut>,
    #[serde(default)]
    units: BTreeMap<Spanned<String>, Spanned<String>>,
    #[serde(default)]
    leads: BTreeMap<Spanned<String>, Spanned<String>>,
    #[serde(default)]
    specimen: RawSpecimen,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawAnalyte {
    system: String,
    code: Spanned<String>,
    is: Analyte,
    unit: Option<Spanned<String>>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawLeftOut {
    system: String,
    codes: Vec<Spanned<String>>,
}

#[derive(Deserialize, Default)]
#[serde(deny_unknown_fields, default)]
struct RawSpecimen {
    haemolysed: Vec<Spanned<String>>,
    unreliable: Vec<Spanned<String>>,
}

/// The twelve leads as they are printed.
const LEADS: [&str; 12] =
    ["I", "II", "III", "aVR", "aVL", "aVF", "V1", "V2", "V3", "V4", "V5", "V6"];

/// A word that is too short would be found in every other comment.
const SHORTEST_WORD: usize = 4;

fn key(system: &str, code: &str) -> String {
    format!("{}\u{1f}{}", system.trim().to_lowercase(), code.trim())
}

impl LocalCodes {
    /// Reads and checks a site's file.
    ///
    /// # Errors
    /// Every mistake found, each with its place.
    pub fn parse(text: &str) -> Result<Self, Vec<Finding>> {
        let raw: Raw =
            toml::from_str(text).map_err(|error| vec![Finding::of_toml(text, &error)])?;
        let mut check = Check { text, wrong: Vec::new(), codes: Self::default() };
        raw.analyte.into_iter().for_each(|row| check.analyte(row.into_inner()));
        raw.left_out.into_iter().for_each(|row| check.left_out(row));
        raw.units.into_iter().for_each(|(from, to)| check.unit(&from, &to));
        raw.leads.into_iter().for_each(|(from, to)| check.lead(&from, &to));
        check.codes.haemolysed = check.words(raw.specimen.haemolysed);
        check.codes.unreliable = check.words(raw.specimen.unreliable);
        if check.wrong.is_empty() { Ok(check.codes) } else { Err(check.wrong) }
    }

    /// What a code stands for; `None` for one that nobody knows. A number means nothing outside its system.
    pub fn meaning(&self, system: &str, code: &str) -> Option<Meaning> {
        let key = key(system, code);
        if let Some((analyte, _)) = self.analytes.get(&key) {
            return Some(Meaning::Analyte(*analyte));
        }
        if self.left_out.contains(&key) {
            return Some(Meaning::LeftOut);
        }
        loinc(system, code)
    }

    /// The unit to convert from: the one that was sent, under its usual name where the site writes another; else the
    /// one that the site states for the code. Empty where nobody says.
    pub fn unit<'a>(&'a self, system: &str, code: &str, sent: &'a str) -> &'a str {
        match sent.trim() {
            "" => self
                .analytes
                .get(&key(system, code))
                .and_then(|(_, unit)| unit.as_deref())
                .unwrap_or(""),
            sent => self.units.get(sent).map_or(sent, String::as_str),
        }
    }

    /// The usual name of a lead that the site's carts call otherwise.
    pub fn lead<'a>(&'a self, name: &'a str) -> &'a str {
        self.leads.get(&folded(name)).map_or(name, String::as_str)
    }

    /// What a comment says of a specimen. "Not haemolysed" counts as haemolysed: a person reads it.
    pub fn specimen(&self, comment: &str) -> Specimen {
        let comment = folded(comment);
        let says = |built_in: &[&str], own: &[String]| {
            built_in.iter().any(|word| comment.contains(word))
                || own.iter().any(|word| comment.contains(word.as_str()))
        };
        Specimen {
            haemolysed: says(&HAEMOLYSED, &self.haemolysed),
            unreliable: says(&UNRELIABLE, &self.unreliable),
        }
    }
}

struct Check<'t> {
    text: &'t str,
    wrong: Vec<Finding>,
    codes: LocalCodes,
}

impl Check<'_> {
    fn add(&mut self, at: usize, message: String, hint: &str) {
        let finding = Finding::at(self.text, at, message);
        self.wrong.push(if hint.is_empty() { finding } else { finding.hint(hint) });
    }

    fn analyte(&mut self, row: RawAnalyte) {
        let (at, code) = (row.code.span().start, row.code.as_ref().clone());
        if row.system.trim().is_empty() || code.trim().is_empty() {
            self.add(at, "a code needs its system and its number".into(), "");
        }
        match loinc(&row.system, &code) {
            Some(Meaning::Analyte(known)) if known != row.is => self.add(
                at,
                format!("LOINC {code} is {known} and can't be made {}", row.is),
                "leave the row out, or correct the code",
            ),
            Some(Meaning::LeftOut) => {
                let what = LOOKS_ALIKE.iter().find(|(other, _)| *other == code.trim());
                let what = what.map_or("something else", |(_, what)| what);
                self.add(
                    at,
                    format!("LOINC {code} is {what}, not {}", row.is),
                    "leave the row out",
                );
            }
            Some(Meaning::Analyte(_)) | None => {}
        }
        if let Some(unit) = &row.unit
            && let Err(why) = row.is.factor(unit.as_ref())
        {
            self.add(unit.span().start, why.to_string(), "");
        }
        let unit = row.unit.map(Spanned::into_inner);
        if self.codes.analytes.insert(key(&row.system, &code), (row.is, unit)).is_some() {
            self.add(at, format!("the code `{code}` of `{}` stands twice", row.system), "");
        }
    }

    fn left_out(&mut self, row: RawLeftOut) {
        for code in row.codes {
            let (at, key) = (code.span().start, key(&row.system, code.as_ref()));
            let is_analyte = self.codes.analytes.contains_key(&key)
                || matches!(loinc(&row.system, code.as_ref()), Some(Meaning::Analyte(_)));
            if is_analyte {
                let code = code.as_ref();
                self.add(at, format!("the code `{code}` is an analyte and left out"), "");
            }
            self.codes.left_out.insert(key);
        }
    }

    fn unit(&mut self, from: &Spanned<String>, to: &Spanned<String>) {
        let known = |unit: &str| Analyte::ALL.iter().any(|analyte| analyte.factor(unit).is_ok());
        let (own, usual) = (from.as_ref().trim(), to.as_ref().trim());
        if !known(usual) {
            self.add(
                to.span().start,
                format!("`{usual}` is not a unit that is known"),
                "known are mmol/L, umol/L, mEq/L, mg/dL, mg/L, g/L, g/dL",
            );
        }
        if known(own) && own != usual {
            self.add(
                from.span().start,
                format!("`{own}` is a unit already and can't be made another"),
                "",
            );
        }
        self.codes.units.insert(own.to_owned(), usual.to_owned());
    }

    fn lead(&mut self, from: &Spanned<String>, to: &Spanned<String>) {
        let is_lead = |name: &str| LEADS.iter().any(|lead| lead.eq_ignore_ascii_case(name.trim()));
        if !is_lead(to.as_ref()) {
            self.add(
                to.span().start,
                format!("`{}` is not one of the twelve leads", to.as_ref()),
                "leads are I, II, III, aVR, aVL, aVF, V1 to V6",
            );
        }
        if is_lead(from.as_ref()) && !from.as_ref().trim().eq_ignore_ascii_case(to.as_ref().trim())
        {
            let from_lead = from.as_ref();
            self.add(from.span().start, format!("lead {from_lead} can't be made another"), "");
        }
        self.codes.leads.insert(folded(from.as_ref()), to.as_ref().trim().to_owned());
    }

    fn words(&mut self, words: Vec<Spanned<String>>) -> Vec<String> {
        let mut found = Vec::new();
        for word in words {
            let plain = folded(word.as_ref());
            if plain.chars().count() < SHORTEST_WORD {
                self.add(
                    word.span().start,
                    format!("`{}` is too short to be looked for in comments", word.as_ref()),
                    "write at least four letters",
                );
            }
            found.push(plain);
        }
        found
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const OWN: &str = r#"
[[analyte]]
system = "SALT-LAB"
code = "K"
is = "potassium"
unit = "mmol/L"

[[analyte]]
system = "SALT-LAB"
code = "ICA"
is = "calcium-ionised"

[[left_out]]
system = "SALT-LAB"
codes = ["NA", "GLU"]

[units]
"MMOL/L" = "mmol/L"

[leads]
"Kanal 1" = "I"

[specimen]
haemolysed = ["hémolysé"]
"#;

    #[test]
    fn what_looks_alike_is_not_confused() {
        let codes = LocalCodes::default();
        let is = |system, code| codes.meaning(system, code);
        assert_eq!(is("LN", "2823-3"), Some(Meaning::Analyte(Analyte::Potassium)));
        assert_eq!(
            is("http://loinc.org", "1995-0"),
            Some(Meaning::Analyte(Analyte::CalciumIonised))
        );
        assert_eq!(is("LOINC", " 17861-6 "), Some(Meaning::Analyte(Analyte::CalciumTotal)));
        for (other, what) in LOOKS_ALIKE {
            assert_eq!(is("LN", other), Some(Meaning::LeftOut), "{what}");
        }
        assert_eq!(is("local", "2823-3"), None, "a number means nothing outside its system");
        assert_eq!(is("LN", "2951-2"), None, "sodium is not known, and reported");
    }

    #[test]
    fn no_code_stands_twice() {
        let mut all: Vec<&str> = LOINC
            .iter()
            .flat_map(|(_, codes)| codes.iter().copied())
            .chain(LOOKS_ALIKE.iter().map(|(code, _)| *code))
            .collect();
        let count = all.len();
        all.sort_unstable();
        all.dedup();
        assert_eq!(all.len(), count);
    }

    /// A LOINC number ends in its own check digit (mod 10, as the LOINC Users' Guide describes it, from memory), so a
    /// slip of the pen shows.
    #[test]
    fn every_loinc_number_carries_its_check_digit() {
        let codes = LOINC.iter().flat_map(|(_, codes)| codes.iter().copied());
        for code in codes.chain(LOOKS_ALIKE.iter().map(|(code, _)| *code)) {
            let (number, check) = code.split_once('-').unwrap();
            let digits = number.bytes().rev().map(|byte| u32::from(byte - b'0'));
            let sum: u32 = digits
                .enumerate()
                .map(|(place, digit)| match place % 2 {
                    0 => (digit * 2) / 10 + (digit * 2) % 10,
                    _ => digit,
                })
                .sum();
            assert_eq!(((10 - sum % 10) % 10).to_string(), check, "{code}");
        }
    }

    #[test]
    fn a_site_names_its_own() {
        let codes = LocalCodes::parse(OWN).unwrap();
        let is = |system, code| codes.meaning(system, code);
        assert_eq!(is("salt-lab", "K"), Some(Meaning::Analyte(Analyte::Potassium)));
        assert_eq!(is("SALT-LAB", "k"), None, "codes are told apart by case");
        assert_eq!(is("SALT-LAB", "NA"), Some(Meaning::LeftOut));
        assert_eq!(is("SALT-LAB", "CL"), None);
        assert_eq!(is("LN", "2823-3"), Some(Meaning::Analyte(Analyte::Potassium)));
        assert_eq!(codes.unit("SALT-LAB", "K", ""), "mmol/L");
        assert_eq!(codes.unit("SALT-LAB", "K", "MMOL/L"), "mmol/L");
        assert_eq!(codes.unit("SALT-LAB", "K", "mg/dL"), "mg/dL", "what was sent wins");
        assert_eq!(codes.unit("SALT-LAB", "ICA", " "), "", "nobody says");
        assert_eq!((codes.lead("KANAL  1"), codes.lead("V2")), ("I", "V2"));
    }

    #[test]
    fn comments_are_read_in_the_sites_own_words_too() {
        let codes = LocalCodes::parse(OWN).unwrap();
        for comment in ["Haemolysed +", "HEMOLYSIS", "hämolytisch", "sang hémolysé", "hemolizat"]
        {
            assert!(codes.specimen(comment).haemolysed, "{comment}");
        }
        assert!(codes.specimen("possible EDTA contamination").unreliable);
        assert_eq!(codes.specimen("taken fasting"), Specimen::default());
    }

    #[test]
    fn mistakes_are_named_where_they_stand() {
        let wrong = |from: &str, to: &str| {
            assert!(OWN.contains(from), "{from}");
            LocalCodes::parse(&OWN.replacen(from, to, 1)).unwrap_err()[0].to_string()
        };
        for (from, to, says) in [
            ("unit = \"mmol/L\"", "units = \"mmol/L\"", "line 6, column 1: unknown field `units`"),
            ("\"potassium\"", "\"kalium\"", "unknown variant `kalium`"),
            (
                "unit = \"mmol/L\"",
                "unit = \"g/L\"",
                "line 6, column 8: `g/L` is not a unit for potassium",
            ),
            ("\"ICA\"", "\"K\"", "line 10, column 8: the code `K` of `SALT-LAB` stands twice"),
            ("\"NA\"", "\"K\"", "line 15, column 10: the code `K` is an analyte and left out"),
            (
                "= \"mmol/L\"\n\n[leads]",
                "= \"mol\"\n\n[leads]",
                "`mol` is not a unit that is known",
            ),
            ("\"MMOL/L\"", "\"mEq/L\"", "line 18, column 1: `mEq/L` is a unit already"),
            ("= \"I\"", "= \"VII\"", "`VII` is not one of the twelve leads"),
            ("\"Kanal 1\"", "\"II\"", "lead II can't be made another"),
            ("hémolysé", "hé", "line 24, column 15: `hé` is too short"),
            (
                "\"SALT-LAB\"\ncode = \"K\"",
                "\"LN\"\ncode = \"2601-3\"",
                "LOINC 2601-3 is magnesium and can't be made potassium",
            ),
            (
                "\"SALT-LAB\"\ncode = \"K\"",
                "\"LN\"\ncode = \"2828-2\"",
                "LOINC 2828-2 is potassium in urine, not potassium",
            ),
            ("\"SALT-LAB\"\ncode = \"K\"", "\" \"\ncode = \"K\"", "a code needs its system"),
        ] {
            let found = wrong(from, to);
            assert!(found.contains(says), "{found}");
        }
    }
}
