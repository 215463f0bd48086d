//! What a laboratory's code means. LOINC rows were each confirmed against at least one public source; a hospital checks
//! them against its own release. What isn't here is reported, never guessed by its name.

use crate::fact::Analyte;

/// Serum, plasma or whole blood only: urine, red cells and pH-adjusted values have codes of their own, which are not here.
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

/// The analyte of a code; `None` for a code that isn't known.
pub fn analyte(system: &str, code: &str) -> Option<Analyte> {
    let system = system.trim();
    let loinc = ["LN", "LOINC", "http://loinc.org", "urn:oid:2.16.840.1.113883.6.1"];
    if !loinc.iter().any(|known| known.eq_ignore_ascii_case(system)) {
        return None;
    }
    let code = code.trim();
    LOINC.iter().find(|(_, codes)| codes.contains(&code)).map(|(analyte, _)| *analyte)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_looks_alike_is_not_confused() {
        assert_eq!(analyte("LN", "2823-3"), Some(Analyte::Potassium));
        assert_eq!(analyte("http://loinc.org", "1995-0"), Some(Analyte::CalciumIonised));
        assert_eq!(analyte("LOINC", "17861-6"), Some(Analyte::CalciumTotal));
        // Urine potassium, red-cell magnesium, calcium adjusted to pH 7.4, albumin-corrected calcium.
        for other in ["2828-2", "26746-8", "2597-3", "19072-8", "29265-6"] {
            assert_eq!(analyte("LN", other), None, "{other}");
        }
        assert_eq!(analyte("local", "2823-3"), None, "a number means nothing outside its system");
    }

    #[test]
    fn no_code_stands_twice() {
        let mut all: Vec<&str> =
            LOINC.iter().flat_map(|(_, codes)| codes.iter().copied()).collect();
        let count = all.len();
        all.sort_unstable();
        all.dedup();
        assert_eq!(all.len(), count);
    }
}
