//! The files that ship must be what they say: checked, with every example holding.

use ebbmark_rules::codes::{LocalCodes, Meaning};
use ebbmark_rules::fact::{Analyte, MedicineName};
use ebbmark_rules::medicines::{MedicineList, Recognised};
use ebbmark_rules::protocol::{Protocol, explain, run_examples};

pub(crate) const PROTOCOL: &str = include_str!("../../../config/protocol.toml");
const CODES: &str = include_str!("../../../config/codes.toml");
pub(crate) const MEDICINES: &str = include_str!("../../../config/medicines.toml");

fn lines(found: Vec<ebbmark_rules::finding::Finding>) -> String {
    found.iter().map(ToString::to_string).collect::<Vec<_>>().join("\n")
}

#[test]
fn the_shipped_protocol_checks_and_its_examples_hold() {
    let protocol = Protocol::parse(PROTOCOL).map_err(lines).unwrap();
    let list = MedicineList::parse(MEDICINES).map_err(lines).unwrap();
    assert!(protocol.rules.len() >= 12);
    assert!(
        protocol.approved.is_none() && list.approved.is_none(),
        "examples are signed by nobody"
    );
    let wrong: Vec<_> =
        run_examples(&protocol, &list).into_iter().filter(|result| !result.holds()).collect();
    assert!(wrong.is_empty(), "{wrong:#?}");
}

#[test]
fn every_rule_is_told_back_in_words() {
    let protocol = Protocol::parse(PROTOCOL).map_err(lines).unwrap();
    let told = explain(&protocol);
    for rule in &protocol.rules {
        assert!(told.contains(&format!("Rule {}", rule.id)), "{}", rule.id);
    }
    assert!(told.contains("Nobody has approved it"));
}

#[test]
fn the_shipped_codes_check_and_name_every_analyte() {
    let codes = LocalCodes::parse(CODES).map_err(lines).unwrap();
    for (code, analyte) in [
        ("K", Analyte::Potassium),
        ("MG", Analyte::Magnesium),
        ("CA", Analyte::CalciumTotal),
        ("ICA", Analyte::CalciumIonised),
        ("ALB", Analyte::Albumin),
        ("CREA", Analyte::Creatinine),
    ] {
        assert_eq!(codes.meaning("SALTMERE-LAB", code), Some(Meaning::Analyte(analyte)));
        assert_eq!(codes.unit("SALTMERE-LAB", code, ""), analyte.canonical());
    }
    assert_eq!(codes.meaning("SALTMERE-LAB", "U-K"), Some(Meaning::LeftOut));
}

#[test]
fn the_shipped_list_names_each_substance_with_code_and_evidence_and_gives_no_advice() {
    let list = MedicineList::parse(MEDICINES).map_err(lines).unwrap();
    // 62 substances of the starter list and, for its row of indirect agents, five of them.
    let (indirect, prolonging): (Vec<_>, Vec<_>) =
        list.medicines().iter().partition(|medicine| medicine.indirect);
    assert_eq!((prolonging.len(), indirect.len()), (62, 5));
    for medicine in list.medicines() {
        assert!(list.evidence.contains_key(&medicine.evidence));
        assert_eq!(medicine.indirect, medicine.evidence == "indirect", "{}", medicine.substance);
        // A note is never shown, but whoever copies it into a message must not be giving orders.
        for word in ["contraindicated", "stop", "avoid", "never", "must", "do not"] {
            let text = format!("{} {}", medicine.note, medicine.evidence_detail).to_lowercase();
            assert!(!text.contains(word), "{}: {text}", medicine.substance);
        }
    }
    assert_eq!(MEDICINES.matches("\ncodes = [\"ATC:").count(), 67 + 4, "and four products");
    assert_eq!(MEDICINES.matches("how_sure = \"").count(), 67);
    let named = |text: &str| list.recognise(&MedicineName { codes: vec![], text: text.into() });
    for (one, other) in [("Frusemide", "furosemide"), ("AMIODARONA", "amiodarone")] {
        assert_eq!(named(one), named(other));
        assert!(matches!(named(one), Recognised::Listed(_)), "{one}");
    }
    assert_eq!(named("co-amilofruse"), named("furosemide"));
    assert_eq!(named("amiodaron retard"), Recognised::No);
}
