//! What people get wrong in a protocol, and what they are told: the place, the mistake, and in most cases a way out.

use crate::config::MEDICINES;
use ebbmark_rules::finding::Spot;
use ebbmark_rules::protocol::check_together;
use serde::Deserialize;

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct File {
    mistake: Vec<Mistake>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct Mistake {
    kind: String,
    change: String,
    to: String,
    at: Option<String>,
    /// `at` is looked for from the beginning of the text: the mistake is told where its table begins.
    #[serde(default)]
    from_start: bool,
    says: String,
}

/// A protocol of its own, so that the shipped one may change.
const PROTOCOL: &str = include_str!("../data/protocol.toml");

fn mistakes() -> Vec<Mistake> {
    toml::from_str::<File>(include_str!("../data/mistakes.toml")).unwrap().mistake
}

#[test]
fn each_mistake_is_told_in_words_at_its_line_and_column() {
    let mut missed = Vec::new();
    for mistake in mistakes() {
        let place = PROTOCOL.find(&mistake.change);
        let place = place.unwrap_or_else(|| panic!("{}: the protocol has changed", mistake.kind));
        let text = PROTOCOL.replacen(&mistake.change, &mistake.to, 1);
        let from = if mistake.from_start { 0 } else { place };
        let at = match &mistake.at {
            Some(at) => {
                from + text[from..].find(at.as_str()).unwrap_or_else(|| panic!("{}", mistake.kind))
            }
            None => place,
        };
        let spot = Spot::of(&text, at);
        let found = check_together(&text, MEDICINES).in_protocol;
        let told = found.iter().any(|one| {
            one.spot == spot
                && (one.message.contains(&mistake.says)
                    || one.hint.as_ref().is_some_and(|hint| hint.contains(&mistake.says)))
        });
        if !told {
            let found: Vec<String> = found.iter().map(ToString::to_string).collect();
            missed.push(format!(
                "{}: wanted at {spot:?}: {}\n    {}",
                mistake.kind,
                mistake.says,
                found.join("\n    ")
            ));
        }
    }
    assert!(missed.is_empty(), "{}", missed.join("\n"));
}

#[test]
fn at_least_forty_kinds_are_held() {
    let mut kinds: Vec<String> = mistakes().into_iter().map(|mistake| mistake.kind).collect();
    kinds.sort();
    kinds.dedup();
    assert!(kinds.len() >= 40, "{}", kinds.len());
}

/// Messages are sentences for people: lower case, no full stop, nothing of the program's insides.
#[test]
fn messages_read_like_the_others() {
    for mistake in mistakes() {
        let text = PROTOCOL.replacen(&mistake.change, &mistake.to, 1);
        for finding in check_together(&text, MEDICINES).in_protocol {
            let message = &finding.message;
            assert!(!message.ends_with('.'), "{}: {message}", mistake.kind);
            assert!(!message.contains("Spanned") && !message.contains("struct"), "{message}");
            let first = message.chars().next().unwrap();
            assert!(!first.is_uppercase(), "{}: {message}", mistake.kind);
        }
    }
}
