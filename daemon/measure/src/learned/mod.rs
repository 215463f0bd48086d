//! The learned reader: small convolutional nets that find the right wave. One voter among others, never the
//! only one.
//!
//! It was trained on the development records only, by the scripts in `training/`, on beats stretched in time,
//! and is never told the rate, so that it cannot pull a long QT towards the usual one. How it scores on
//! records it never saw is in `weights.md`.

#![allow(clippy::indexing_slicing, reason = "one answer for each lead that went in")]

mod average;
mod features;
mod net;
mod posterior;
mod weights;

#[cfg(test)]
mod parity;

pub(crate) use average::{Average, BEFORE, Beats, Track};
pub(crate) use posterior::Posterior;

use features::{CHANNELS, QRS_GRID, T_GRID};
use net::{Logits, Net};
use std::sync::OnceLock;
use weights::NotWeights;

/// The nets, read once from the embedded file.
#[derive(Debug)]
pub(crate) struct Reader {
    t: Vec<Net>,
    qrs: Vec<Net>,
}

/// Marks of one averaged beat, each with its doubt, in ms after the R peak.
#[derive(Debug, Clone)]
pub(crate) struct Reading {
    /// For all leads together: QRS onset and T end by the second most outlying lead, as the experts'
    /// consensus is defined; with one or two leads, as one reader marks both.
    pub(crate) global: Triple,
    /// For each lead, in the order given.
    pub(crate) leads: Vec<Triple>,
}

/// What is believed about the three marks that matter.
#[derive(Debug, Clone)]
pub(crate) struct Triple {
    pub(crate) qrs_on: Posterior,
    pub(crate) qrs_off: Posterior,
    pub(crate) t_end: Posterior,
}

/// Up to this many leads, each is also read as if it were the only one.
const FEW_LEADS: usize = 3;
/// The quantile of the T end's probability that has no bias against the experts' consensus over many leads:
/// the second latest of many marks lies in the later half of what the leads show.
const CONSENSUS: f32 = 0.6;

impl Triple {
    /// QRS onset, ms after the R peak (so usually negative).
    pub(crate) fn qrs_on_ms(&self) -> f32 {
        self.qrs_on.mean_near_mode(4)
    }

    /// QRS end, ms after the R peak.
    pub(crate) fn qrs_off_ms(&self) -> f32 {
        self.qrs_off.mean_near_mode(4)
    }

    /// T end, ms after the R peak.
    pub(crate) fn t_end_ms(&self) -> f32 {
        self.t_end.mean_near_mode(8)
    }
}

impl Reading {
    /// T end over all leads, ms after the R peak.
    pub(crate) fn t_end_ms(&self) -> f32 {
        if self.leads.len() > FEW_LEADS {
            self.global.t_end.quantile_near_mode(CONSENSUS, 12)
        } else {
            self.global.t_end_ms()
        }
    }
}

impl Reader {
    /// The nets that ship with this crate.
    pub(crate) fn shipped() -> Result<&'static Self, &'static NotWeights> {
        static READER: OnceLock<Result<Reader, NotWeights>> = OnceLock::new();
        READER.get_or_init(|| Reader::parse(include_str!("weights.txt"))).as_ref()
    }

    /// Reads a weights file.
    pub(crate) fn parse(text: &str) -> Result<Self, NotWeights> {
        let nets = weights::parse(text)?;
        let named = |start: &str, outputs: usize| {
            nets.iter()
                .filter(|(name, _)| name.starts_with(start))
                .map(|(_, tensors)| Net::parse(tensors))
                .map(|net| match net {
                    Ok(net) if net.channels() == CHANNELS && net.outputs() == outputs => Ok(net),
                    Ok(_) => Err(NotWeights::Shape),
                    Err(e) => Err(e),
                })
                .collect::<Result<Vec<_>, _>>()
        };
        let reader = Self { t: named("t-end", 1)?, qrs: named("qrs", 2)? };
        if reader.t.is_empty() || reader.qrs.is_empty() {
            return Err(NotWeights::Missing("nets for both marks".to_owned()));
        }
        Ok(reader)
    }

    /// Reads an average of like beats.
    pub(crate) fn read(&self, average: &Average) -> Reading {
        let qrs_inputs = features::for_qrs(average);
        let qrs: Vec<Logits> = self.qrs.iter().map(|net| net.forward(&qrs_inputs)).collect();
        let on_and_off = |pick: &dyn Fn(&Logits) -> &Vec<f32>| {
            [0, 1].map(|output| {
                let rows: Vec<Vec<f32>> = qrs
                    .iter()
                    .map(|logits| pick(logits).iter().skip(output).step_by(2).copied().collect())
                    .collect();
                Posterior::pooled(QRS_GRID, &rows)
            })
        };
        let (together, each) = self.t_ends(average);
        let triple = |[qrs_on, qrs_off]: [Posterior; 2], t_end| Triple { qrs_on, qrs_off, t_end };
        Reading {
            global: triple(on_and_off(&|logits| &logits.global), together),
            leads: each
                .into_iter()
                .enumerate()
                .map(|(i, t_end)| triple(on_and_off(&|logits| &logits.leads[i]), t_end))
                .collect(),
        }
    }

    /// The T end over all leads and of each lead. A single lead is best read alone, and of a few leads each
    /// counts in what is said of all.
    fn t_ends(&self, average: &Average) -> (Posterior, Vec<Posterior>) {
        let pooled = |rows: &[Vec<f32>]| Posterior::pooled(T_GRID, rows);
        let read = |average: &Average| -> Vec<Logits> {
            let inputs = features::for_t(average);
            self.t.iter().map(|net| net.forward(&inputs)).collect()
        };
        let all = read(average);
        let global: Vec<Vec<f32>> = all.iter().map(|logits| logits.global.clone()).collect();
        let leads = average.low.len();
        if leads > FEW_LEADS {
            let lead = |i: usize| -> Vec<Vec<f32>> {
                all.iter().map(|logits| logits.leads[i].clone()).collect()
            };
            let each = (0..leads).map(|i| pooled(&lead(i))).collect();
            return (pooled(&global), each);
        }
        let alone: Vec<Posterior> = (0..leads)
            .map(|i| {
                let logits = read(&average.only(i));
                pooled(&logits.into_iter().map(|l| l.global).collect::<Vec<_>>())
            })
            .collect();
        (pooled(&global).and_as_much(&alone), alone)
    }
}

/// What training sees of each beat: its R peak in seconds, its length in ms, then the low and the wide track of
/// every lead, each beat averaged with up to eight that resemble it.
pub(crate) fn training_windows(leads: &[&[f32]], hz: f32, r: &[usize]) -> Vec<Vec<f32>> {
    let beats = Beats { leads, hz, r };
    (0..r.len())
        .map(|beat| {
            let average = beats.average(&beats.neighbours(beat, 15, 8));
            let mut out = vec![r[beat] as f32 / hz, beats.rr_ms(beat)];
            for track in average.low.iter().chain(&average.wide) {
                out.extend_from_slice(&track.uv);
            }
            out
        })
        .collect()
}
