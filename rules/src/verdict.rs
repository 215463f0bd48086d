//! Three answers, and how they combine. Absence of data is never safety: what can't be told stays visible through the
//! whole tree.

use crate::alert::EvidenceRow;
use crate::fact::At;
use crate::ids::{OrderId, ResultId, TracingId};
use std::collections::BTreeSet;

/// What a condition answers.
#[derive(Debug, Clone, PartialEq)]
pub enum Verdict {
    /// It holds, because of these.
    Fired(Because),
    /// It doesn't.
    Quiet,
    /// It can't be told, because this is missing.
    CannotTell(Missing),
}

/// Why a condition holds.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Because {
    /// The values, with limits, times and sources.
    pub rows: Vec<EvidenceRow>,
    /// A value's doubt reaches below its limit.
    pub borderline: bool,
    /// It rests on a QTc of a wide QRS that nobody has over-read.
    pub wide: bool,
    /// The highest QTc limit that was reached, ms.
    pub limit_ms: Option<f64>,
    /// What it rests on, so that a correction can disprove it.
    pub rests_on: BTreeSet<Basis>,
}

/// Something that a later fact may correct.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord)]
pub enum Basis {
    /// A tracing.
    Tracing(TracingId),
    /// A result.
    Result(ResultId),
    /// A dose, by its own number.
    Dose(Box<str>),
    /// An order.
    Order(OrderId),
    /// An active listed substance.
    Medicine(Box<str>),
    /// Something due at a time.
    Due(Box<str>, At),
    /// Something that the chart says, as it says it.
    Said(Box<str>),
}

/// What is missing.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Missing {
    /// In words, one each.
    pub what: Vec<Box<str>>,
    /// Nothing is missing but certainty: a value lies below its limit by less than its doubt.
    pub borderline: bool,
    /// The values that make it so.
    pub because: Because,
}

impl Verdict {
    /// Holds because of one row resting on something.
    pub fn fired(row: EvidenceRow, rests_on: impl IntoIterator<Item = Basis>) -> Self {
        Verdict::Fired(Because {
            rows: vec![row],
            rests_on: rests_on.into_iter().collect(),
            ..Because::default()
        })
    }

    /// Can't be told for this reason.
    pub fn cannot_tell(what: impl Into<Box<str>>) -> Self {
        Verdict::CannotTell(Missing { what: vec![what.into()], ..Missing::default() })
    }

    /// Every one of them: quiet if one is quiet, else not told if one is not.
    pub fn all(verdicts: impl IntoIterator<Item = Verdict>) -> Self {
        let (mut because, mut missing, mut quiet) = (Because::default(), Vec::new(), false);
        for verdict in verdicts {
            match verdict {
                Verdict::Fired(more) => because.join(more),
                Verdict::Quiet => quiet = true,
                Verdict::CannotTell(more) => missing.push(more),
            }
        }
        match (quiet, Missing::joined(missing)) {
            (true, _) => Verdict::Quiet,
            (false, Some(mut missing)) => {
                missing.because.join(because);
                Verdict::CannotTell(missing)
            }
            (false, None) => Verdict::Fired(because),
        }
    }

    /// At least `n` of them. With `n` = 1 it is "any".
    pub fn at_least(n: usize, verdicts: impl IntoIterator<Item = Verdict>) -> Self {
        let (mut because, mut missing, mut fired) = (Because::default(), Vec::new(), 0);
        let (mut narrow, mut certain) = (0, 0);
        for verdict in verdicts {
            match verdict {
                Verdict::Fired(more) => {
                    fired += 1;
                    narrow += usize::from(!more.wide);
                    certain += usize::from(!more.borderline);
                    because.join(more);
                }
                Verdict::Quiet => {}
                Verdict::CannotTell(more) => missing.push(more),
            }
        }
        if fired >= n {
            // Enough of them hold without the estimate, or without the doubt: the answer doesn't rest on it.
            because.wide &= narrow < n;
            because.borderline &= certain < n;
            Verdict::Fired(because)
        } else if fired + missing.len() >= n {
            let mut missing = Missing::joined(missing).unwrap_or_default();
            missing.because.join(because);
            Verdict::CannotTell(missing)
        } else {
            Verdict::Quiet
        }
    }

    /// Not one of them.
    pub fn none(verdicts: impl IntoIterator<Item = Verdict>) -> Self {
        match Verdict::at_least(1, verdicts) {
            Verdict::Fired(_) => Verdict::Quiet,
            Verdict::Quiet => Verdict::Fired(Because::default()),
            Verdict::CannotTell(missing) => Verdict::CannotTell(missing),
        }
    }
}

impl Because {
    fn join(&mut self, other: Because) {
        for row in other.rows {
            if !self.rows.contains(&row) {
                self.rows.push(row);
            }
        }
        self.borderline |= other.borderline;
        self.wide |= other.wide;
        self.limit_ms = match (self.limit_ms, other.limit_ms) {
            (Some(a), Some(b)) => Some(a.max(b)),
            (a, b) => a.or(b),
        };
        self.rests_on.extend(other.rests_on);
    }
}

impl Missing {
    /// Together they are borderline only if each is: a missing value is not a near one.
    fn joined(all: Vec<Missing>) -> Option<Missing> {
        all.into_iter().reduce(|mut a, b| {
            for what in b.what {
                if !a.what.contains(&what) {
                    a.what.push(what);
                }
            }
            a.borderline &= b.borderline;
            a.because.join(b.because);
            a
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn fired() -> Verdict {
        Verdict::Fired(Because::default())
    }

    fn missing() -> Verdict {
        Verdict::cannot_tell("potassium")
    }

    fn kind(verdict: &Verdict) -> u8 {
        match verdict {
            Verdict::Fired(_) => 2,
            Verdict::CannotTell(_) => 1,
            Verdict::Quiet => 0,
        }
    }

    fn any_verdict() -> impl Strategy<Value = Verdict> {
        prop_oneof![Just(fired()), Just(Verdict::Quiet), Just(missing())]
    }

    proptest! {
        /// Kleene's strong three-valued logic: all is the least, any is the greatest, none is the denial of any.
        #[test]
        fn answers_combine_as_kleene_has_it(verdicts in prop::collection::vec(any_verdict(), 1..6)) {
            let kinds: Vec<u8> = verdicts.iter().map(kind).collect();
            prop_assert_eq!(kind(&Verdict::all(verdicts.clone())), *kinds.iter().min().unwrap());
            prop_assert_eq!(kind(&Verdict::at_least(1, verdicts.clone())), *kinds.iter().max().unwrap());
            prop_assert_eq!(kind(&Verdict::none(verdicts.clone())), 2 - kinds.iter().max().unwrap());
        }

        /// "Can't tell" never becomes quiet unless the answer is quiet whatever the missing value would be.
        #[test]
        fn what_is_missing_never_hides_an_answer(verdicts in prop::collection::vec(any_verdict(), 1..6), n in 1usize..6) {
            let with = |other: fn() -> Verdict| {
                let filled = verdicts.iter().map(|v| if matches!(v, Verdict::CannotTell(_)) { other() } else { v.clone() });
                kind(&Verdict::at_least(n, filled))
            };
            let (high, low) = (with(fired), with(|| Verdict::Quiet));
            let found = kind(&Verdict::at_least(n, verdicts.clone()));
            prop_assert_eq!(found, if high == low { high } else { 1 });
        }
    }

    /// A wide-QRS estimate caps the tier of what rests on it, and of nothing else.
    #[test]
    fn what_holds_without_the_estimate_is_not_capped_by_it() {
        let wide =
            || Verdict::Fired(Because { wide: true, borderline: true, ..Because::default() });
        let marks = |verdict| match verdict {
            Verdict::Fired(because) => (because.wide, because.borderline),
            other @ (Verdict::Quiet | Verdict::CannotTell(_)) => panic!("{other:?}"),
        };
        assert_eq!(marks(Verdict::at_least(1, [wide(), fired()])), (false, false));
        assert_eq!(marks(Verdict::at_least(2, [wide(), fired()])), (true, true));
        assert_eq!(marks(Verdict::at_least(2, [wide(), fired(), fired()])), (false, false));
        assert_eq!(marks(Verdict::all([wide(), fired()])), (true, true));
    }

    #[test]
    fn a_missing_value_beside_a_near_one_is_not_borderline() {
        let near = Verdict::CannotTell(Missing { borderline: true, ..Missing::default() });
        let Verdict::CannotTell(both) = Verdict::all([near, missing()]) else { panic!() };
        assert!(!both.borderline);
    }
}
