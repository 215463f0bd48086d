//! Bias and limits of agreement (Bland & Altman, Lancet 1986;1:307, from memory).

use statrs::distribution::{ContinuousCDF, StudentsT};

/// A figure with its 95 % confidence interval.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Estimate {
    /// The figure.
    pub value: f64,
    /// Lower end of its 95 % confidence interval.
    pub low: f64,
    /// Upper end.
    pub high: f64,
}

/// Agreement of two ways to measure the same thing, in the unit of the differences.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Limits {
    /// How many pairs.
    pub n: usize,
    /// Mean difference.
    pub bias: Estimate,
    /// Sample standard deviation of the differences (n − 1).
    pub sd: f64,
    /// bias − 1.96 SD.
    pub lower: Estimate,
    /// bias + 1.96 SD.
    pub upper: Estimate,
}

/// Bias and limits of agreement of differences. The interval of the bias is bias ± t·SD/√n; that of a limit is
/// limit ± t·√(3/n)·SD, the approximation of the 1986 paper, which is too narrow below about 30 pairs. Assumes that
/// the differences are roughly normal and do not depend on the size of what is measured; look at the plot.
/// `None` under three pairs.
pub fn limits(differences: &[f64]) -> Option<Limits> {
    let n = differences.len();
    if n < 3 {
        return None;
    }
    let count = n as f64;
    let bias = differences.iter().sum::<f64>() / count;
    let sd = (differences.iter().map(|d| (d - bias).powi(2)).sum::<f64>() / (count - 1.0)).sqrt();
    let t = student(count - 1.0)?;
    let around = |value: f64, half: f64| Estimate { value, low: value - half, high: value + half };
    let of_limit = t * (3.0 / count).sqrt() * sd;
    Some(Limits {
        n,
        bias: around(bias, t * sd / count.sqrt()),
        sd,
        lower: around(bias - 1.96 * sd, of_limit),
        upper: around(bias + 1.96 * sd, of_limit),
    })
}

/// The two-sided 95 % quantile of Student's t.
pub(super) fn student(degrees: f64) -> Option<f64> {
    Some(StudentsT::new(0.0, 1.0, degrees).ok()?.inverse_cdf(0.975))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn worked_by_hand() {
        // [A]: differences 1, 2, 3, 4, 5: mean 3, SD sqrt(2.5) = 1.5811, t(4) = 2.7764 (printed tables).
        let found = limits(&[1.0, 2.0, 3.0, 4.0, 5.0]).unwrap();
        let near = |a: f64, b: f64| assert!((a - b).abs() < 5e-4, "{a} is not {b}");
        near(found.bias.value, 3.0);
        near(found.sd, 1.5811);
        near(found.bias.low, 3.0 - 2.7764 * 1.5811 / 5f64.sqrt());
        near(found.upper.value, 3.0 + 1.96 * 1.5811);
        near(found.upper.high, 3.0 + 1.96 * 1.5811 + 2.7764 * (0.6f64).sqrt() * 1.5811);
    }

    #[test]
    fn two_pairs_say_nothing() {
        assert_eq!(limits(&[1.0, 2.0]), None);
    }
}
