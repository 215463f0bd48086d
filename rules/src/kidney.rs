//! Kidney function from creatinine.

use crate::fact::Sex;

/// Creatinine clearance, mL/min, by Cockcroft & Gault, Nephron 1976;16:31 (from memory): (140 − age)·kg /
/// (72·Scr mg/dL), × 0.85 for women. What medicine labels use; poor at extremes of weight and when creatinine is
/// changing. `creatinine` in µmol/L. `None` for a creatinine that is not above 0 or an age from 140.
pub fn cockcroft_gault(age: u32, weight_kg: f64, creatinine_umol_l: f64, sex: Sex) -> Option<f64> {
    if creatinine_umol_l <= 0.0 || age >= 140 {
        return None;
    }
    let factor = if sex == Sex::Female { 0.85 } else { 1.0 };
    Some((140.0 - f64::from(age)) * weight_kg / (72.0 * creatinine_umol_l / 88.42) * factor)
}

/// Estimated filtration, mL/min/1.73 m², by CKD-EPI 2021 (Inker et al., NEJM 2021;385:1737): 142·min(Scr/κ,1)^α·
/// max(Scr/κ,1)^−1.200·0.9938^age, × 1.012 for women; κ 0.7 / 0.9, α −0.241 / −0.302 (women / men). Adults, steady state.
pub fn ckd_epi(age: u32, creatinine_umol_l: f64, sex: Sex) -> Option<f64> {
    if creatinine_umol_l <= 0.0 {
        return None;
    }
    let (kappa, alpha, factor) =
        if sex == Sex::Female { (0.7, -0.241, 1.012) } else { (0.9, -0.302, 1.0) };
    let ratio = creatinine_umol_l / 88.42 / kappa;
    Some(
        142.0
            * ratio.min(1.0).powf(alpha)
            * ratio.max(1.0).powf(-1.2)
            * 0.9938f64.powf(f64::from(age))
            * factor,
    )
}

#[cfg(test)]
mod tests {
    use super::*;

    /// methods.md §8 [A]; 0.005 is its rounding.
    #[test]
    fn vectors() {
        let near = |found: Option<f64>, expected: f64| {
            assert!((found.unwrap() - expected).abs() < 0.005, "{found:?}")
        };
        near(cockcroft_gault(40, 70.0, 88.42, Sex::Male), 97.22);
        near(ckd_epi(40, 88.42, Sex::Male), 97.58);
        near(cockcroft_gault(82, 55.0, 1.1 * 88.42, Sex::Female), 34.24);
        near(ckd_epi(82, 1.1 * 88.42, Sex::Female), 50.17);
        assert_eq!(cockcroft_gault(40, 70.0, 0.0, Sex::Male), None);
    }
}
