//! The hospital's own list of medicines that prolong QT or otherwise matter for it.
//!
//! A medicine is found by code, or by a name that is the same after folding case, accents and spaces; never by
//! likeness. What is neither on the list nor named in `left_out` is "not recognised" and put before the pharmacist.

use crate::fact::MedicineName;
use crate::finding::Finding;
use crate::routes;
use crate::units::Hours;
use chrono::NaiveDate;
use serde::Deserialize;
use std::collections::{BTreeMap, BTreeSet};
use toml::Spanned;
use unicode_normalization::UnicodeNormalization;

/// A checked list. The default one is empty: it recognises nothing.
#[derive(Debug, Clone, Default)]
pub struct MedicineList {
    /// Its name.
    pub name: String,
    /// Its version.
    pub version: String,
    /// Who answers for it in this hospital; `None` for an example.
    pub approved: Option<(String, NaiveDate)>,
    /// When it is to be looked at again.
    pub review_by: Option<NaiveDate>,
    /// Kinds of evidence, in plain words.
    pub evidence: BTreeMap<String, String>,
    medicines: Vec<Medicine>,
    by_name: BTreeMap<String, Vec<usize>>,
    by_code: BTreeMap<String, Vec<usize>>,
    left_out: BTreeSet<String>,
    left_out_codes: BTreeSet<String>,
}

/// One substance of the list.
#[derive(Debug, Clone)]
pub struct Medicine {
    /// Its name on the list.
    pub substance: String,
    /// The kind of evidence: a key of [`MedicineList::evidence`].
    pub evidence: String,
    /// What is to be added to that kind's words (`intravenous, high dose`); may be empty.
    pub evidence_detail: String,
    /// Does not prolong QT itself: it lowers potassium or magnesium, or slows the heart. It counts only where a rule names
    /// its evidence, its group or the substance itself, and as a loop diuretic for the Tisdale score.
    pub indirect: bool,
    /// How long until half is gone; `None` where the list does not say.
    pub half_life: Option<Hours>,
    /// What clears it: `renal`, `cyp3a4`, …
    pub cleared_by: Vec<String>,
    /// What it inhibits.
    pub inhibits: Vec<String>,
    /// Groups that rules may name (`loop-diuretic`).
    pub groups: Vec<String>,
    /// Routes by which it counts; any where empty.
    pub routes: Vec<String>,
    /// For the list's maker; never told to anyone as advice.
    pub note: String,
}

/// What a feed's medicine is.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Recognised {
    /// On the list: indices into [`MedicineList::medicines`]; several for a combination product.
    Listed(Vec<usize>),
    /// Looked at by the hospital and left out of the list.
    LeftOut,
    /// Neither: a person has to look.
    No,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawFile {
    list: RawHead,
    evidence: BTreeMap<String, String>,
    #[serde(default)]
    left_out: Vec<Spanned<String>>,
    #[serde(default)]
    left_out_codes: Vec<Spanned<String>>,
    #[serde(default)]
    medicine: Vec<Spanned<RawMedicine>>,
    #[serde(default)]
    product: Vec<Spanned<RawProduct>>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawHead {
    name: String,
    version: String,
    #[serde(default)]
    approved_by: String,
    approved_on: Option<Spanned<toml::value::Datetime>>,
    review_by: Option<Spanned<toml::value::Datetime>>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawMedicine {
    substance: Spanned<String>,
    #[serde(default)]
    codes: Vec<Spanned<String>>,
    #[serde(default)]
    names: Vec<Spanned<String>>,
    evidence: Spanned<String>,
    #[serde(default)]
    evidence_detail: String,
    #[serde(default)]
    indirect: bool,
    half_life_h: Option<Spanned<f64>>,
    #[serde(default)]
    cleared_by: Vec<Spanned<String>>,
    #[serde(default)]
    inhibits: Vec<Spanned<String>>,
    #[serde(default)]
    groups: Vec<String>,
    #[serde(default)]
    routes: Vec<Spanned<String>>,
    #[serde(default)]
    note: String,
    /// How sure the list's maker is; for the reader of the file.
    #[serde(default, rename = "how_sure")]
    _how_sure: String,
}

/// A product of several substances of the list.
#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RawProduct {
    names: Vec<Spanned<String>>,
    #[serde(default)]
    codes: Vec<Spanned<String>>,
    substances: Vec<Spanned<String>>,
}

/// Case, accents and runs of spaces folded away: the one likeness that is allowed.
pub fn folded(name: &str) -> String {
    let plain = name.nfd().filter(|c| !unicode_normalization::char::is_combining_mark(*c));
    plain.collect::<String>().to_lowercase().split_whitespace().collect::<Vec<_>>().join(" ")
}

/// Ways by which a medicine leaves the body, and which another may inhibit.
const PATHS: [&str; 15] = [
    "renal",
    "renal-secretion",
    "hepatic",
    "biliary",
    "faecal",
    "cyp1a2",
    "cyp2b6",
    "cyp2c8",
    "cyp2c9",
    "cyp2c19",
    "cyp2d6",
    "cyp3a4",
    "p-gp",
    "nat2",
    "ugt",
];

fn code_key(system: &str, code: &str) -> String {
    format!("{}:{}", system.trim().to_ascii_uppercase(), code.trim().to_ascii_uppercase())
}

impl MedicineList {
    /// Reads and checks a list.
    ///
    /// # Errors
    /// Every mistake found, each with its place.
    pub fn parse(text: &str) -> Result<Self, Vec<Finding>> {
        let raw: RawFile =
            toml::from_str(text).map_err(|error| vec![Finding::of_toml(text, &error)])?;
        let mut wrong = Vec::new();
        let mut list = Self {
            name: raw.list.name,
            version: raw.list.version,
            approved: None,
            review_by: raw.list.review_by.and_then(|date| day(text, &date, &mut wrong)),
            evidence: raw.evidence,
            medicines: Vec::new(),
            by_name: BTreeMap::new(),
            by_code: BTreeMap::new(),
            left_out: BTreeSet::new(),
            left_out_codes: BTreeSet::new(),
        };
        match (raw.list.approved_by.trim(), raw.list.approved_on) {
            ("", None) => {}
            ("", Some(on)) => wrong.push(
                Finding::at(
                    text,
                    on.span().start,
                    "the list has a date of approval and nobody who approved it",
                )
                .hint("write `approved_by = \"name\"` beside it"),
            ),
            (by, on) => match on {
                Some(on) => {
                    list.approved = day(text, &on, &mut wrong).map(|on| (by.to_owned(), on))
                }
                None => wrong.push(
                    Finding::at(
                        text,
                        text.find("approved_by").unwrap_or(0),
                        "the list is approved without a date",
                    )
                    .hint("write `approved_on = 2027-01-31` beside it"),
                ),
            },
        }
        for medicine in raw.medicine {
            list.add(text, medicine.into_inner(), &mut wrong);
        }
        for product in raw.product {
            list.add_product(text, product.into_inner(), &mut wrong);
        }
        for name in raw.left_out {
            let key = folded(name.as_ref());
            if list.by_name.contains_key(&key) {
                wrong.push(Finding::at(
                    text,
                    name.span().start,
                    format!("`{}` is on the list and left out of it", name.as_ref()),
                ));
            }
            list.left_out.insert(key);
        }
        for code in &raw.left_out_codes {
            let Some(key) = list.code_of(text, code, &mut wrong) else { continue };
            if list.by_code.contains_key(&key) {
                wrong.push(Finding::at(
                    text,
                    code.span().start,
                    format!("the code `{}` is on the list and left out of it", code.as_ref()),
                ));
            }
            list.left_out_codes.insert(key);
        }
        if list.medicines.is_empty() {
            wrong.push(
                Finding::at(text, 0, "the list names no medicine")
                    .hint("write at least one [[medicine]]"),
            );
        }
        if wrong.is_empty() { Ok(list) } else { Err(wrong) }
    }

    fn add(&mut self, text: &str, raw: RawMedicine, wrong: &mut Vec<Finding>) {
        let index = self.medicines.len();
        let evidence = raw.evidence.as_ref();
        if !self.evidence.contains_key(evidence) {
            let known = self.evidence.keys().map(String::as_str).collect::<Vec<_>>().join(", ");
            wrong.push(
                Finding::at(
                    text,
                    raw.evidence.span().start,
                    format!("`{evidence}` is not a kind of evidence of this list"),
                )
                .hint(format!("[evidence] names: {known}")),
            );
        }
        let half_life = raw.half_life_h.and_then(|hours| match Hours::new(*hours.as_ref()) {
            Ok(value) if value.get() > 0.0 => Some(value),
            _ => {
                wrong.push(Finding::at(
                    text,
                    hours.span().start,
                    "a half-life is a number of hours above 0",
                ));
                None
            }
        });
        let paths = |paths: Vec<Spanned<String>>, wrong: &mut Vec<Finding>| {
            paths
                .into_iter()
                .map(|path| {
                    if !PATHS.contains(&path.as_ref().as_str()) {
                        let message = format!("`{}` is not a way of clearance", path.as_ref());
                        wrong.push(
                            Finding::at(text, path.span().start, message)
                                .hint(format!("known are {}", PATHS.join(", "))),
                        );
                    }
                    path.into_inner()
                })
                .collect()
        };
        for route in raw.routes.iter().filter(|route| routes::usual(route.as_ref()).is_none()) {
            let message = format!("`{}` is not a route that is known", route.as_ref());
            wrong.push(
                Finding::at(text, route.span().start, message)
                    .hint(format!("known are {}", routes::usual_ones())),
            );
        }
        for name in std::iter::once(&raw.substance).chain(&raw.names) {
            self.name(text, name, vec![index], wrong);
        }
        for code in &raw.codes {
            self.code(text, code, vec![index], wrong);
        }
        self.medicines.push(Medicine {
            substance: raw.substance.into_inner(),
            evidence: raw.evidence.into_inner(),
            evidence_detail: raw.evidence_detail,
            indirect: raw.indirect,
            half_life,
            cleared_by: paths(raw.cleared_by, wrong),
            inhibits: paths(raw.inhibits, wrong),
            groups: raw.groups,
            routes: raw.routes.into_iter().map(Spanned::into_inner).collect(),
            note: raw.note,
        });
    }

    fn add_product(&mut self, text: &str, raw: RawProduct, wrong: &mut Vec<Finding>) {
        let mut parts = Vec::new();
        for substance in &raw.substances {
            match self.by_name.get(&folded(substance.as_ref())) {
                Some(found) => parts.extend(found),
                None => wrong.push(
                    Finding::at(
                        text,
                        substance.span().start,
                        format!("`{}` is not on this list", substance.as_ref()),
                    )
                    .hint("a product names substances that stand as [[medicine]] above it"),
                ),
            }
        }
        for name in &raw.names {
            self.name(text, name, parts.clone(), wrong);
        }
        for code in &raw.codes {
            self.code(text, code, parts.clone(), wrong);
        }
    }

    fn name(
        &mut self,
        text: &str,
        name: &Spanned<String>,
        is: Vec<usize>,
        wrong: &mut Vec<Finding>,
    ) {
        let key = folded(name.as_ref());
        if key.is_empty() {
            wrong.push(Finding::at(text, name.span().start, "a name is empty"));
        } else if self.by_name.insert(key, is.clone()).is_some_and(|other| other != is) {
            // A second spelling that folds to the first is harmless; one that means another substance is not.
            wrong.push(Finding::at(
                text,
                name.span().start,
                format!("the name `{}` means two different things", name.as_ref()),
            ));
        }
    }

    fn code(
        &mut self,
        text: &str,
        code: &Spanned<String>,
        is: Vec<usize>,
        wrong: &mut Vec<Finding>,
    ) {
        let Some(key) = self.code_of(text, code, wrong) else { return };
        if self.by_code.insert(key, is).is_some() {
            wrong.push(Finding::at(
                text,
                code.span().start,
                format!("the code `{}` stands twice", code.as_ref()),
            ));
        }
    }

    fn code_of(
        &self,
        text: &str,
        code: &Spanned<String>,
        wrong: &mut Vec<Finding>,
    ) -> Option<String> {
        match code.as_ref().split_once(':') {
            Some((system, number)) if !system.trim().is_empty() && !number.trim().is_empty() => {
                Some(code_key(system, number))
            }
            _ => {
                let message = format!("`{}` is not a code with its system", code.as_ref());
                wrong.push(Finding::at(text, code.span().start, message).hint(
                    "write for example \"ATC:C01BD01\", \"RxNorm:703\" or \"local:AMIO200\"",
                ));
                None
            }
        }
    }

    /// All substances, in the file's order.
    pub fn medicines(&self) -> &[Medicine] {
        &self.medicines
    }

    /// What a feed's medicine is: by any of its codes, else by its exact folded name.
    pub fn recognise(&self, medicine: &MedicineName) -> Recognised {
        let keys = || medicine.codes.iter().map(|code| code_key(&code.system, &code.code));
        if let Some(found) = keys().find_map(|key| self.by_code.get(&key)) {
            return Recognised::Listed(found.clone());
        }
        if keys().any(|key| self.left_out_codes.contains(&key)) {
            return Recognised::LeftOut;
        }
        let name = folded(&medicine.text);
        match self.by_name.get(&name) {
            Some(found) => Recognised::Listed(found.clone()),
            None if self.left_out.contains(&name) => Recognised::LeftOut,
            None => Recognised::No,
        }
    }

    /// Why the list itself is not to be relied on at a date, in words; empty where it is signed and not due for review.
    pub fn doubts(&self, today: NaiveDate) -> Vec<String> {
        let mut found = Vec::new();
        if self.approved.is_none() {
            found.push(format!(
                "the medicine list \"{}\" is an example that nobody in this hospital has signed",
                self.name
            ));
        }
        if let Some(by) = self.review_by.filter(|by| *by < today) {
            found.push(format!("the medicine list was to be reviewed by {by}"));
        }
        found
    }
}

impl Medicine {
    /// Whether it counts when given by this route, as written by the feed. A feed without a route counts, and so does a
    /// route that nobody knows.
    pub fn counts_by(&self, route: Option<&str>) -> bool {
        let excluded =
            |route: &str| self.routes.iter().all(|own| routes::same(own, route) == Some(false));
        self.routes.is_empty() || route.is_none_or(|route| !excluded(route))
    }

    /// By what `self` raises the other's exposure, if the list says so: it inhibits what clears the other.
    pub fn raises<'a>(&'a self, other: &'a Medicine) -> Option<&'a str> {
        let shared = |path: &&String| other.cleared_by.contains(path);
        self.inhibits
            .iter()
            .find(shared)
            .map(String::as_str)
            .filter(|_| self.substance != other.substance)
    }
}

fn day(
    text: &str,
    date: &Spanned<toml::value::Datetime>,
    wrong: &mut Vec<Finding>,
) -> Option<NaiveDate> {
    let value = date.as_ref();
    let day = value.date.filter(|_| value.time.is_none()).and_then(|d| {
        NaiveDate::from_ymd_opt(i32::from(d.year), u32::from(d.month), u32::from(d.day))
    });
    if day.is_none() {
        wrong.push(
            Finding::at(text, date.span().start, "this is not a plain date")
                .hint("write 2027-01-31"),
        );
    }
    day
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::fact::Code;

    const LIST: &str = r#"
left_out = ["Paracetamol"]
left_out_codes = ["ATC:S01AE03"]
[list]
name = "test"
version = "1"
[evidence]
labels = "torsades reported and warned of in labels"
[[medicine]]
substance = "haloperidol"
codes = ["ATC:N05AD01"]
names = ["Halopéridol"]
evidence = "labels"
half_life_h = 20
cleared_by = ["cyp3a4"]
[[medicine]]
substance = "clarithromycin"
evidence = "labels"
inhibits = ["cyp3a4"]
routes = ["PO"]
[[product]]
names = ["invented pair"]
substances = ["haloperidol", "clarithromycin"]
"#;

    fn named(text: &str) -> MedicineName {
        MedicineName { codes: Vec::new(), text: text.into() }
    }

    #[test]
    fn names_match_exactly_after_folding_and_never_by_likeness() {
        let list = MedicineList::parse(LIST).unwrap();
        for name in ["HALOPERIDOL", " halopéridol ", "Haloperidol"] {
            assert_eq!(list.recognise(&named(name)), Recognised::Listed(vec![0]), "{name}");
        }
        for name in ["haloperidole", "haloperido", "haloperidol 5 mg", ""] {
            assert_eq!(list.recognise(&named(name)), Recognised::No, "{name}");
        }
        assert_eq!(list.recognise(&named("paracetamol")), Recognised::LeftOut);
        assert_eq!(list.recognise(&named("Invented  Pair")), Recognised::Listed(vec![0, 1]));
    }

    #[test]
    fn a_code_finds_it_whatever_the_name() {
        let list = MedicineList::parse(LIST).unwrap();
        let code = Code { system: "atc".into(), code: "n05ad01".into() };
        let medicine = MedicineName { codes: vec![code], text: "Haldol Tbl".into() };
        assert_eq!(list.recognise(&medicine), Recognised::Listed(vec![0]));
        let coded = |code: &str, text: &str| {
            let code = Code { system: "ATC".into(), code: code.into() };
            list.recognise(&MedicineName { codes: vec![code], text: text.into() })
        };
        assert_eq!(coded("S01AE03", "eye drops"), Recognised::LeftOut);
        assert_eq!(coded("S01AE03", "haloperidol"), Recognised::LeftOut, "a code says more");
        assert_eq!(coded("X99XX99", "haloperidol"), Recognised::Listed(vec![0]));
        assert_eq!(coded("X99XX99", "eye drops"), Recognised::No);
    }

    #[test]
    fn an_inhibitor_raises_what_its_path_clears() {
        let list = MedicineList::parse(LIST).unwrap();
        let [halo, clari] = list.medicines() else { panic!("two") };
        assert_eq!(clari.raises(halo), Some("cyp3a4"));
        assert_eq!(halo.raises(clari), None);
        assert!(clari.counts_by(None) && clari.counts_by(Some("by mouth")));
        assert!(clari.counts_by(Some("pump 3")), "a route that nobody knows counts");
        assert!(!clari.counts_by(Some("topical")) && halo.counts_by(Some("topical")));
    }

    #[test]
    fn an_unsigned_or_old_list_says_so() {
        let day = |y, m, d| NaiveDate::from_ymd_opt(y, m, d).unwrap();
        let list = MedicineList::parse(LIST).unwrap();
        assert!(list.doubts(day(2027, 1, 1))[0].contains("nobody in this hospital has signed"));
        let signed = LIST.replacen(
            "version = \"1\"",
            "version = \"1\"\napproved_by = \"A. Moss\"\napproved_on = 2027-01-31\nreview_by = 2027-06-30",
            1,
        );
        let list = MedicineList::parse(&signed).unwrap();
        assert_eq!(list.doubts(day(2027, 6, 30)), Vec::<String>::new());
        assert_eq!(
            list.doubts(day(2027, 7, 1)),
            ["the medicine list was to be reviewed by 2027-06-30"]
        );
    }

    #[test]
    fn mistakes_are_named_where_they_stand() {
        let wrong = |from: &str, to: &str| {
            let found = MedicineList::parse(&LIST.replacen(from, to, 1)).unwrap_err();
            format!("{}", found[0])
        };
        assert!(
            wrong("version = \"1\"", "version = \"1\"\ncolour = 1")
                .contains("unknown field `colour`")
        );
        assert!(
            wrong("evidence = \"labels\"", "evidence = \"rumour\"")
                .contains("[evidence] names: labels")
        );
        assert!(
            wrong("half_life_h = 20", "half_life_h = -1")
                .starts_with("line 14, column 15: a half-life")
        );
        assert!(
            wrong("names = [\"Halopéridol\"]", "names = [\"Invented Pair\"]")
                .contains("means two different things")
        );
        assert!(wrong("ATC:N05AD01", "N05AD01").contains("not a code with its system"));
        assert!(wrong("[\"haloperidol\", ", "[\"haloperidl\", ").contains("is not on this list"));
        assert!(wrong("[\"Paracetamol\"]", "[\"haloperidol\"]").contains("left out of it"));
        assert!(
            wrong("version = \"1\"", "version = \"1\"\napproved_by = \"X\"")
                .contains("without a date")
        );
        assert!(
            wrong("version = \"1\"", "version = \"1\"\napproved_on = 2027-01-31")
                .contains("nobody who approved it")
        );
        assert!(
            wrong("version = \"1\"", "version = \"1\"\nreview_by = 2027-01-31T10:00:00Z")
                .contains("not a plain date")
        );
        assert!(wrong("[\"cyp3a4\"]", "[\"cyp34a\"]").contains("known are renal"));
        assert!(
            wrong("[\"PO\"]", "[\"PQ\"]").starts_with("line 20, column 11: `PQ` is not a route")
        );
        assert!(wrong("ATC:S01AE03", "ATC:N05AD01").contains("on the list and left out"));
        assert!(wrong("ATC:S01AE03", "S01AE03").contains("not a code with its system"));
        assert!(
            wrong("substance = \"clarithromycin\"", "substance = \"Haloperidol\"")
                .contains("means two different things")
        );
        assert!(
            wrong("substance = \"clarithromycin\"", "substance = \"x\"\nnames = [\" \"]")
                .contains("a name is empty")
        );
        assert!(
            wrong("half_life_h = 20", "half_life_h = 20\nhalf_life_h = 20")
                .contains("duplicate key")
        );
        let nothing = "[list]\nname = \"x\"\nversion = \"1\"\n[evidence]\n";
        let found = MedicineList::parse(nothing).unwrap_err();
        assert!(found[0].message.contains("names no medicine"));
    }
}
