//! Protocol and medicine list held against each other: what `ebbmark check` needs.

use super::condition::{Condition, Medicines};
use super::{ExampleResult, Protocol, run_examples};
use crate::finding::Finding;
use crate::medicines::{MedicineList, folded};
use std::collections::BTreeSet;
use toml::Spanned;

/// A protocol and a medicine list that were checked together.
#[derive(Debug, Clone)]
pub struct Books {
    /// The protocol, if its own text is right.
    pub protocol: Option<Protocol>,
    /// The list, if its own text is right.
    pub list: Option<MedicineList>,
    /// Mistakes in the protocol's text, and what it names that the list doesn't know.
    pub in_protocol: Vec<Finding>,
    /// Mistakes in the list's text.
    pub in_list: Vec<Finding>,
    /// What came of the protocol's own examples; empty while either text is wrong.
    pub examples: Vec<ExampleResult>,
}

impl Books {
    /// Nothing is wrong and every example holds.
    pub fn hold(&self) -> bool {
        self.in_protocol.is_empty()
            && self.in_list.is_empty()
            && self.examples.iter().all(ExampleResult::holds)
    }
}

/// Checks both texts, each by itself and against the other, and runs the protocol's examples.
pub fn check_together(protocol_text: &str, list_text: &str) -> Books {
    let (protocol, mut in_protocol) = match Protocol::parse(protocol_text) {
        Ok(protocol) => (Some(protocol), Vec::new()),
        Err(found) => (None, found),
    };
    let (list, in_list) = match MedicineList::parse(list_text) {
        Ok(list) => (Some(list), Vec::new()),
        Err(found) => (None, found),
    };
    let mut examples = Vec::new();
    if let (Some(protocol), Some(list)) = (&protocol, &list) {
        in_protocol = strangers(protocol_text, protocol, list);
        examples = run_examples(protocol, list);
    }
    Books { protocol, list, in_protocol, in_list, examples }
}

/// What a protocol names and a list doesn't know.
pub(super) fn strangers(text: &str, protocol: &Protocol, list: &MedicineList) -> Vec<Finding> {
    let mut asks = Vec::new();
    for rule in &protocol.rules {
        rule.only_if.iter().chain([&rule.when]).for_each(|part| medicines(part, &mut asks));
    }
    let names = |pick: fn(&Medicines) -> &Vec<Spanned<String>>| {
        asks.iter().flat_map(move |is| pick(is)).collect::<Vec<_>>()
    };
    let watches = &protocol.watches;
    let evidence = list.evidence.keys().cloned().collect();
    let groups = list.medicines().iter().flat_map(|medicine| medicine.groups.clone()).collect();
    let substances = list.medicines().iter().map(|m| folded(&m.substance)).collect();
    let mut found = Vec::new();
    let mut hold = |what: &str, known: &BTreeSet<String>, named: Vec<&Spanned<String>>| {
        for name in named {
            let same = |own: &String| own.eq_ignore_ascii_case(&folded(name.as_ref()));
            if !known.iter().any(same) {
                let few: Vec<&str> = known.iter().map(String::as_str).take(12).collect();
                let more = if known.len() > few.len() { ", …" } else { "" };
                let message = format!("the medicine list knows no {what} `{}`", name.as_ref());
                found.push(
                    Finding::at(text, name.span().start, message)
                        .hint(format!("it knows: {}{more}", few.join(", "))),
                );
            }
        }
    };
    let with = |rules: Vec<_>, of: Vec<_>| rules.into_iter().chain(of).collect::<Vec<_>>();
    let watched = |pick: fn(&super::Watch) -> &Vec<Spanned<String>>| {
        watches.iter().flat_map(pick).collect::<Vec<_>>()
    };
    hold("kind of evidence", &evidence, with(names(|is| &is.evidence), watched(|w| &w.evidence)));
    hold("group", &groups, with(names(|is| &is.groups), watched(|w| &w.groups)));
    hold("substance", &substances, with(names(|is| &is.substances), watched(|w| &w.substances)));
    found.sort_by_key(|finding| finding.spot);
    found
}

#[allow(clippy::wildcard_enum_match_arm, reason = "the others name no medicine")]
fn medicines<'c>(condition: &'c Condition, found: &mut Vec<&'c Medicines>) {
    match condition {
        Condition::All(of) | Condition::Any(of) | Condition::None(of) => {
            of.iter().for_each(|part| medicines(part, found));
        }
        Condition::AtLeast(few) => few.of.iter().for_each(|part| medicines(part, found)),
        Condition::Medicines(is) => found.push(is),
        _ => {}
    }
}
