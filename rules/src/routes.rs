//! Ways of giving a medicine, as feeds write them. A way that nobody knows here excludes nothing: it counts.

use crate::medicines::folded;

/// The usual abbreviation, and what else feeds write for it (HL7 table 0162 from memory, and common practice).
const ROUTES: &[(&str, &[&str])] = &[
    ("PO", &["oral", "orally", "by mouth", "per os", "os"]),
    ("NG", &["ngt", "nasogastric", "ng tube", "enteral", "enteral tube"]),
    ("PEG", &["gt", "gastrostomy"]),
    (
        "IV",
        &[
            "intravenous",
            "intravenously",
            "intravenous injection",
            "intravenous infusion",
            "intravenous bolus",
            "iv infusion",
            "iv injection",
            "iv bolus",
            "iv push",
            "ivp",
            "ivpb",
            "ivb",
            "intravenös",
            "intraveineuse",
            "intravenosa",
            "endovenosa",
        ],
    ),
    ("IM", &["intramuscular", "intramuscular injection"]),
    ("SC", &["sq", "subcut", "subcutaneous", "subcutaneous injection", "subcutaneous infusion"]),
    ("SL", &["sublingual", "buc", "buccal"]),
    ("PR", &["rc", "rectal", "per rectum"]),
    ("TD", &["transdermal", "patch"]),
    ("TOP", &["tp", "topical", "cutaneous", "skin"]),
    ("INH", &["ih", "inhaled", "inhalation", "neb", "nebulised", "nebulized"]),
    ("NAS", &["ns", "nasal", "intranasal"]),
    ("OPH", &["op", "eye", "ophthalmic", "ocular"]),
    ("OT", &["ear", "otic", "aural"]),
    ("VAG", &["vg", "vaginal"]),
    ("IT", &["intrathecal"]),
    ("EP", &["epidural"]),
    ("IA", &["intraarterial", "intra-arterial"]),
    ("IC", &["intracoronary"]),
];

/// The usual abbreviations, for a hint.
pub fn usual_ones() -> String {
    ROUTES.iter().map(|(usual, _)| *usual).collect::<Vec<_>>().join(", ")
}

/// The usual abbreviation of a route; `None` where it isn't known.
pub fn usual(route: &str) -> Option<&'static str> {
    let route = folded(&route.replace('.', ""));
    let is = |known: &&str| folded(known) == route;
    ROUTES
        .iter()
        .find(|(usual, others)| is(usual) || others.iter().any(is))
        .map(|(usual, _)| *usual)
}

/// Whether two routes are the same; `None` where one of them isn't known.
pub fn same(one: &str, other: &str) -> Option<bool> {
    if folded(one) == folded(other) {
        return Some(true);
    }
    Some(usual(one)? == usual(other)?)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_route_is_known_however_it_is_written() {
        for written in ["IV", "i.v.", " Intravenous ", "IV infusion", "INTRAVENÖS"] {
            assert_eq!(usual(written), Some("IV"), "{written}");
        }
        assert_eq!((same("PO", "by mouth"), same("PO", "iv")), (Some(true), Some(false)));
        assert_eq!((same("PO", "pump 3"), same("pump 3", "Pump  3")), (None, Some(true)));
        assert_eq!(usual(""), None);
    }

    #[test]
    fn no_word_means_two_routes() {
        let mut all: Vec<String> = ROUTES
            .iter()
            .flat_map(|(usual, others)| others.iter().chain([usual]))
            .map(|word| folded(word))
            .collect();
        let count = all.len();
        all.sort_unstable();
        all.dedup();
        assert_eq!(all.len(), count);
    }
}
