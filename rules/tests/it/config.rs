//! The files that ship must be what they say: checked, with every example holding.

use ebbmark_rules::medicines::MedicineList;
use ebbmark_rules::protocol::{Protocol, explain, run_examples};

pub(crate) const PROTOCOL: &str = include_str!("../../../config/protocol.toml");
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
