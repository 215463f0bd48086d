//! The training scripts and this crate must see and say the same: `parity.txt` holds averaged leads and what
//! the scripts computed from them with the shipped weights.

use super::average::{Average, Track};
use super::weights::NotWeights;
use super::{Posterior, Reader, features};
use std::collections::BTreeMap;

fn stored() -> BTreeMap<&'static str, Vec<Vec<f32>>> {
    let mut all: BTreeMap<&str, Vec<Vec<f32>>> = BTreeMap::new();
    for line in include_str!("parity.txt").lines() {
        let mut words = line.split(' ');
        let name = words.next().unwrap_or_default();
        let values = words.filter_map(|w| w.parse().ok()).collect();
        all.entry(name).or_default().push(values);
    }
    all
}

fn furthest(a: &[f32], b: &[f32]) -> f32 {
    assert_eq!(a.len(), b.len());
    a.iter().zip(b).map(|(a, b)| (a - b).abs()).fold(0.0, f32::max)
}

#[test]
fn inputs_and_answers_are_those_of_the_training_scripts() -> Result<(), NotWeights> {
    let stored = stored();
    let average = Average {
        rr_ms: stored["rr"][0][0],
        low: stored["low"].iter().cloned().map(Track::low).collect(),
        wide: stored["wide"].iter().cloned().map(Track::wide).collect(),
    };
    // The fixture is rounded to four (inputs) and five (probabilities) decimals.
    assert!(furthest(&features::for_t(&average)[0], &stored["t_input_0"][0]) < 2e-4);
    assert!(furthest(&features::for_qrs(&average)[0], &stored["qrs_input_0"][0]) < 2e-4);
    let reader = Reader::shipped().map_err(Clone::clone)?;
    let reading = reader.read(&average);
    let same = |ours: &Posterior, name: &str| {
        let apart = furthest(ours.probabilities(), &stored[name][0]);
        assert!(apart < 1e-3, "{name}: {apart}");
    };
    same(&reading.global.t_end, "t_global");
    same(&reading.leads[0].t_end, "t_lead_0");
    same(&reading.global.qrs_on, "on_global");
    same(&reading.leads[0].qrs_off, "off_lead_0");
    Ok(())
}
