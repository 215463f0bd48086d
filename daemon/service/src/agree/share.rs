//! A share of a few, with the interval that few deserve (Wilson, J Am Stat Assoc 1927;22:209, from memory).

/// `of` out of `n`, with its 95 % interval.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Share {
    /// How many.
    pub of: usize,
    /// Out of how many.
    pub n: usize,
    /// Lower end of the 95 % interval, 0 to 1.
    pub low: f64,
    /// Upper end.
    pub high: f64,
}

impl Share {
    /// The plain share, 0 to 1.
    pub fn value(&self) -> f64 {
        self.of as f64 / self.n as f64
    }
}

/// The share with Wilson's score interval. `None` out of nothing.
pub fn share(of: usize, n: usize) -> Option<Share> {
    if n == 0 || of > n {
        return None;
    }
    let (p, count, z) = (of as f64 / n as f64, n as f64, 1.959_964);
    let centre = (p + z * z / (2.0 * count)) / (1.0 + z * z / count);
    let half =
        z * (p * (1.0 - p) / count + z * z / (4.0 * count * count)).sqrt() / (1.0 + z * z / count);
    Some(Share { of, n, low: (centre - half).max(0.0), high: (centre + half).min(1.0) })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn wilson_as_statsmodels_gives_it() {
        // statsmodels 0.14 proportion_confint(7, 10, method="wilson"): 0.396778, 0.892209 (run and read).
        let found = share(7, 10).unwrap();
        assert!(
            (found.low - 0.396_778).abs() < 1e-5 && (found.high - 0.892_209).abs() < 1e-5,
            "{found:?}"
        );
    }

    #[test]
    fn none_of_three_still_may_be_many() {
        let none = share(0, 3).unwrap();
        assert!(none.low.abs() < 1e-12 && none.high > 0.5);
        assert_eq!(share(0, 0), None);
    }
}
