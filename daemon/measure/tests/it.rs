//! The engine from outside, on signals made here.

#![allow(
    clippy::unwrap_used,
    clippy::panic,
    clippy::cast_sign_loss,
    clippy::cast_possible_truncation,
    clippy::cast_precision_loss,
    clippy::indexing_slicing,
    reason = "a test that can't go on should stop where it stands; samples are kept as f32"
)]

use ebbmark_measure::{Answer, Lead, Options, Reason, Recording, Signal, measure};

/// P, QRS and T as smooth humps, every `rr_s`, in two leads; T ends where its hump does, 400 ms after the QRS begins.
fn made(hz: f64, seconds: f64, rr_s: f64, gain: f32) -> Vec<Signal> {
    let hump = |t: f64, from: f64, to: f64| {
        let x = (t - from) / (to - from);
        if (0.0..=1.0).contains(&x) {
            0.5 - 0.5 * (2.0 * std::f64::consts::PI * x).cos()
        } else {
            0.0
        }
    };
    let beat = |t: f64| {
        100.0 * hump(t, 0.10, 0.20) - 150.0 * hump(t, 0.26, 0.29) + 1100.0 * hump(t, 0.28, 0.33)
            - 250.0 * hump(t, 0.32, 0.36)
            + 320.0 * hump(t, 0.44, 0.66)
    };
    let samples = (seconds * hz) as usize;
    let lead = |lead: Lead, share: f32| Signal {
        lead,
        uv: (0..samples).map(|i| gain * share * beat((i as f64 / hz) % rr_s) as f32).collect(),
    };
    vec![lead(Lead::II, 1.0), lead(Lead::V5, 0.8)]
}

fn qt(hz: f64, leads: Vec<Signal>) -> f64 {
    let found = measure(&Recording::new(hz, leads).unwrap(), &Options::default());
    found.intervals.unwrap_or_else(|| panic!("{:?}", found.answer)).qt.get()
}

#[test]
fn gain_offset_polarity_order_and_rate_do_not_move_the_interval() {
    let own = qt(500.0, made(500.0, 10.0, 0.9, 1.0));
    // The hump's feet are flat, so readers may differ from its exact end by what a foot is worth.
    assert!((own - 400.0).abs() < 40.0, "{own}");
    assert!((qt(500.0, made(500.0, 10.0, 0.9, 3.0)) - own).abs() < 1.0, "gain");
    assert!((qt(500.0, made(500.0, 10.0, 0.9, -1.0)) - own).abs() < 8.0, "polarity");
    let mut turned = made(500.0, 10.0, 0.9, 1.0);
    turned.reverse();
    assert!((qt(500.0, turned) - own).abs() < 1.0, "order of leads");
    let mut lifted = made(500.0, 10.0, 0.9, 1.0);
    lifted.iter_mut().for_each(|signal| signal.uv.iter_mut().for_each(|v| *v += 4000.0));
    assert!((qt(500.0, lifted) - own).abs() < 2.0, "offset");
    for hz in [250.0, 1000.0] {
        assert!((qt(hz, made(hz, 10.0, 0.9, 1.0)) - own).abs() <= 4.0, "{hz} Hz");
    }
}

#[test]
fn rate_is_read_from_the_intervals() {
    let found =
        measure(&Recording::new(500.0, made(500.0, 10.0, 0.8, 1.0)).unwrap(), &Options::default());
    // Beats 0.8 s apart: 75 a minute; on paper 300 / 4 large squares (common practice, no source).
    assert!((found.rate.unwrap().get() - 75.0).abs() < 0.5);
}

#[test]
fn flat_short_or_absent_signals_give_none_with_a_reason() {
    let none = |hz, leads| {
        let found = measure(&Recording::new(hz, leads).unwrap(), &Options::default());
        assert!(found.intervals.is_none());
        match found.answer {
            Answer::None(why) => why,
            other @ (Answer::Good | Answer::Doubtful(_)) => panic!("{other:?}"),
        }
    };
    let flat = vec![Signal { lead: Lead::II, uv: vec![0.0; 5000] }];
    assert_eq!(none(500.0, flat), [Reason::NoUsableLead]);
    assert!(matches!(none(500.0, made(500.0, 1.5, 0.9, 1.0))[..], [Reason::TooShort(_)]));
    let missing = vec![Signal { lead: Lead::II, uv: vec![f32::NAN; 5000] }];
    assert_eq!(none(500.0, missing), [Reason::NoUsableLead]);
}

#[test]
fn missing_samples_make_it_doubtful() {
    let mut leads = made(500.0, 10.0, 0.9, 1.0);
    leads.iter_mut().for_each(|signal| signal.uv[2300..2700].fill(f32::NAN));
    let found = measure(&Recording::new(500.0, leads).unwrap(), &Options::default());
    assert!(found.answer.why().contains(&Reason::MissingSamples), "{:?}", found.answer);
}

#[test]
fn a_lead_that_is_off_leaves_the_others() {
    let mut leads = made(500.0, 10.0, 0.9, 1.0);
    let own = qt(500.0, leads.clone());
    leads.push(Signal { lead: Lead::V1, uv: vec![12.0; 5000] });
    let found = measure(&Recording::new(500.0, leads).unwrap(), &Options::default());
    assert!((found.intervals.unwrap().qt.get() - own).abs() < 1.0);
    assert!(found.remarks.contains(&Reason::LeadOff(Lead::V1)) && !found.per_lead[2].used);
}
