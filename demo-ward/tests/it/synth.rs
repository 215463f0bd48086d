//! The tracings are what their truth says.

use ebbmark_demo_ward::synth::{
    Electrode, Noise, Pace, QrsShape, Sketch, TShape, Truth, synthesise,
};
use ebbmark_measure::{BeatKind, Lead, Recording, Rhythm};

const SHAPES: [TShape; 7] = [
    TShape::Normal,
    TShape::Flat,
    TShape::Biphasic,
    TShape::Notched,
    TShape::Inverted,
    TShape::Peaked,
    TShape::WithU,
];

fn quiet() -> Sketch {
    Sketch { noise: Noise::none(), pace: Pace::Sinus { variability: 0.0 }, ..Sketch::default() }
}

fn drawn(sketch: &Sketch) -> (Recording, Truth) {
    synthesise(sketch).unwrap()
}

/// The largest absolute value over all leads in a stretch, µV.
fn largest(recording: &Recording, from_s: f64, to_s: f64) -> f32 {
    let hz = recording.sampling().get();
    let stretch = (from_s * hz).ceil() as usize..(to_s * hz).floor() as usize;
    recording
        .leads()
        .iter()
        .flat_map(|signal| &signal.uv[stretch.clone()])
        .fold(0.0, |largest: f32, uv| largest.max(uv.abs()))
}

/// Nothing before QRS onset and after T end, something just within: over QT, rate, shapes of T and of QRS, and sampling
/// rates. With a pacemaker's spike left out of sight by looking 6 ms ahead of QRS.
#[test]
fn waves_begin_and_end_where_the_truth_says() {
    for (qt_ms, rate_per_min) in [(280.0, 90.0), (400.0, 60.0), (520.0, 55.0), (640.0, 45.0)] {
        for t in SHAPES {
            for (qrs, qrs_ms) in [
                (QrsShape::Narrow, 84.0),
                (QrsShape::LeftBundle, 150.0),
                (QrsShape::RightBundle, 134.0),
                (QrsShape::Paced, 165.0),
            ] {
                let sketch = Sketch {
                    qt_ms,
                    rate_per_min,
                    t,
                    qrs,
                    qrs_ms,
                    sampling_hz: 1000.0,
                    seconds: 5.0,
                    ..quiet()
                };
                let (recording, truth) = drawn(&sketch);
                let beat = truth.beats[2];
                let name = format!("{qt_ms} {t:?} {qrs:?}");
                let after = if t == TShape::WithU { 0.013 } else { 0.03 };
                assert_eq!(
                    largest(&recording, beat.t_end_s + 0.001, beat.t_end_s + after),
                    0.0,
                    "{name}"
                );
                assert_eq!(
                    largest(&recording, beat.qrs_on_s - 0.012, beat.qrs_on_s - 0.001),
                    0.0,
                    "{name}"
                );
                assert!(largest(&recording, beat.qrs_on_s, beat.qrs_on_s + 0.012) > 15.0, "{name}");
                assert!(
                    largest(&recording, beat.qrs_off_s - 0.012, beat.qrs_off_s) > 15.0,
                    "{name}"
                );
                let end = largest(&recording, beat.t_end_s - 0.03, beat.t_end_s);
                assert!(end > if t == TShape::Flat { 5.0 } else { 20.0 }, "{name}: {end}");
                assert!((beat.t_end_s - beat.qrs_on_s - qt_ms / 1000.0).abs() < 1e-9, "{name}");
                let early = 1000.0 * (beat.t_end_s - beat.t_end_tangent_s);
                // A limb of 100 ms gives 9; two humps blunt the last limb.
                assert!((2.0..=26.0).contains(&early), "{name}: tangent {early} ms early");
            }
        }
    }
}

#[test]
fn twelve_leads_obey_einthoven_and_goldberger_also_with_noise() {
    let sketch = Sketch {
        noise: Noise { muscle_uv: 50.0, mains_uv: 30.0, ..Noise::default() },
        ..Sketch::default()
    };
    let (recording, _) = drawn(&sketch);
    let lead = |lead| &recording.lead(&lead).unwrap().uv;
    let (i, ii) = (lead(Lead::I), lead(Lead::II));
    for n in 0..recording.samples() {
        // f32 of values up to a few thousand microvolts.
        assert!((lead(Lead::III)[n] - (ii[n] - i[n])).abs() < 0.01);
        assert!((lead(Lead::Avr)[n] + (i[n] + ii[n]) / 2.0).abs() < 0.01);
        assert!((lead(Lead::Avl)[n] - (i[n] - ii[n] / 2.0)).abs() < 0.01);
        assert!((lead(Lead::Avf)[n] - (ii[n] - i[n] / 2.0)).abs() < 0.01);
    }
}

#[test]
fn same_heart_at_another_sampling_rate_is_the_same_heart() {
    for hz in [125.0, 250.0, 360.0, 1000.0, 2000.0] {
        let (recording, truth) = drawn(&Sketch { sampling_hz: hz, ..quiet() });
        let (usual, expected) = drawn(&quiet());
        assert_eq!(truth, expected);
        assert_eq!(recording.samples(), (10.0 * hz) as usize);
        // Where the top of R in II stands, to a sample of the coarser one.
        let top = |recording: &Recording| {
            let from = (expected.beats[0].qrs_on_s * recording.sampling().get()) as usize;
            let uv = &recording.lead(&Lead::II).unwrap().uv[from..];
            let beat = &uv[..(0.1 * recording.sampling().get()) as usize];
            let top = beat.iter().enumerate().max_by(|a, b| a.1.total_cmp(b.1)).unwrap().0;
            (from + top) as f64 / recording.sampling().get()
        };
        assert!((top(&recording) - top(&usual)).abs() <= 1.01 / hz.min(500.0), "{hz}");
    }
}

#[test]
fn same_seed_gives_the_same_tracing_and_another_seed_another() {
    let uv = |sketch: &Sketch| drawn(sketch).0.leads()[1].uv.clone();
    assert_eq!(uv(&Sketch::default()), uv(&Sketch::default()));
    assert_ne!(uv(&Sketch::default()), uv(&Sketch { seed: 2, ..Sketch::default() }));
    assert_ne!(uv(&quiet()), uv(&Sketch { heart: 2, ..quiet() }), "another person");
}

#[test]
fn rhythms_have_the_rate_and_the_pattern_they_are_called_after() {
    let rr = |pace, rate_per_min| {
        let (_, truth) =
            drawn(&Sketch { pace, rate_per_min, seconds: 120.0, qt_ms: 360.0, ..quiet() });
        let onsets: Vec<f64> = truth.beats.iter().map(|beat| beat.qrs_on_s).collect();
        let rr: Vec<f64> = onsets.windows(2).map(|pair| pair[1] - pair[0]).collect();
        let mean = rr.iter().sum::<f64>() / rr.len() as f64;
        let sd = (rr.iter().map(|r| (r - mean).powi(2)).sum::<f64>() / rr.len() as f64).sqrt();
        assert!((truth.rr_ms - 1000.0 * mean).abs() < 1e-6);
        (truth, 60.0 / mean, sd / mean)
    };
    let (_, rate, spread) = rr(Pace::Sinus { variability: 0.03 }, 72.0);
    assert!((rate - 72.0).abs() < 1.0 && (0.015..0.03).contains(&spread), "{rate} {spread}");
    let (truth, rate, spread) = rr(Pace::AtrialFibrillation, 88.0);
    assert_eq!(truth.rhythm, Rhythm::IrregularlyIrregular);
    assert!((rate - 88.0).abs() < 6.0 && spread > 0.15, "{rate} {spread}");
    let (truth, rate, _) = rr(Pace::Ectopics { every: 2 }, 70.0);
    let others = truth.beats.iter().filter(|beat| beat.kind == BeatKind::Other).count();
    assert!(others.abs_diff(truth.beats.len() / 2) <= 1, "bigeminy");
    assert!((rate - 70.0).abs() < 2.0, "{rate}");
    let (truth, rate, spread) = rr(Pace::Paced, 70.0);
    assert!(truth.paced && (rate - 70.0).abs() < 0.1 && spread < 1e-6);
    let (_, rate, spread) = rr(Pace::Changing { to_per_min: 90.0 }, 60.0);
    assert!((66.0..80.0).contains(&rate) && spread > 0.08, "{rate} {spread}");
}

/// Common practice, no source: R grows from V1 to V4, S shrinks from V2 to V6, T is upright in I, II and V3 to V6.
#[test]
fn a_normal_tracing_looks_normal() {
    for heart in 0..20 {
        let (recording, truth) = drawn(&Sketch { heart, ..quiet() });
        let beat = truth.beats[1];
        let part = |lead: &Lead| {
            let uv = &recording.lead(lead).unwrap().uv;
            uv[(500.0 * beat.qrs_on_s) as usize..(500.0 * beat.qrs_off_s) as usize + 1].to_vec()
        };
        let r = |lead| part(&lead).into_iter().fold(0.0, f32::max);
        let s = |lead| part(&lead).into_iter().fold(0.0, f32::min);
        assert!(r(Lead::V1) < r(Lead::V3) && r(Lead::V3) < r(Lead::V4), "heart {heart}");
        assert!(s(Lead::V2) < s(Lead::V4) && s(Lead::V4) < s(Lead::V6), "heart {heart}");
        assert!(r(Lead::I) > -s(Lead::I), "heart {heart}: axis to the left of +90 degrees");
        for lead in &truth.leads {
            if matches!(lead.lead, Lead::I | Lead::II | Lead::V3 | Lead::V4 | Lead::V5 | Lead::V6) {
                assert!(lead.t_uv > 40.0, "heart {heart}, {}", lead.lead);
            }
        }
    }
}

#[test]
fn lead_with_its_electrode_off_shows_no_heart() {
    let noise = Noise { off: vec![Electrode::V3], ..Noise::none() };
    let (recording, truth) = drawn(&Sketch { noise, ..quiet() });
    let (whole, _) = drawn(&quiet());
    let at = (500.0 * (truth.beats[2].qrs_on_s + 0.04)) as usize;
    let steps = |recording: &Recording, lead: &Lead| {
        let uv = &recording.lead(lead).unwrap().uv;
        // Over a whole turn of the mains, so that only what isn't mains is left.
        (uv[at + 10] - uv[at]).abs()
    };
    assert!(steps(&whole, &Lead::V3) > 100.0);
    assert!(steps(&recording, &Lead::V3) < 60.0);
    assert_eq!(recording.lead(&Lead::V4).unwrap().uv, whole.lead(&Lead::V4).unwrap().uv);
}
