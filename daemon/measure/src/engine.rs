//! From a recording to everything measured on it.

#![allow(
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    clippy::cast_precision_loss,
    reason = "positions within checked bounds; samples to ms and back"
)]

use crate::clean::{Clean, Cleaned, HZ, clean};
use crate::learned::{Beats, Reader};
use crate::measurement::{
    Answer, Beat, BeatKind, Intervals, LeadReading, Marks, Measurement, MedianBeat, MedianLead,
    Reason, Rhythm, TEndMethod,
};
use crate::reading::{GroupRead, read};
use crate::recording::{Lead, Recording};
use crate::series::{Series, median, series};
use crate::shape::dominant;
use crate::units::{Microvolts, Ms, PerMinute, Seconds};
use crate::{Options, beats, verdict};

/// A longer recording is read in pieces of this length, so that memory does not grow with it.
const PIECE_S: f64 = 900.0;
/// Shorter than this holds too few beats.
const SHORTEST_S: f64 = 2.0;

/// One beat as read.
pub(crate) struct ReadBeat {
    /// R peak, seconds from the file's first sample.
    pub r_s: f64,
    pub normal: bool,
    pub group: usize,
}

/// Everything read, before it is judged.
pub(crate) struct Read {
    pub beats: Vec<ReadBeat>,
    pub groups: Vec<GroupRead>,
    pub series: Option<Series>,
    pub remarks: Vec<Reason>,
    pub paced: bool,
    /// From when to when nothing was read, in seconds: no RR is counted across.
    pub holes: Vec<(f64, f64)>,
    /// Places of the leads that were used.
    pub used: Vec<usize>,
    /// µV from lowest to highest of each used lead's QRS.
    pub heights: Vec<f32>,
}

/// Measures with the nets given; `None` leaves them out.
pub(crate) fn measure(
    recording: &Recording,
    options: &Options,
    learned: Option<&Reader>,
) -> Measurement {
    let hz = recording.sampling().get();
    let sample = |s: Option<Seconds>, or: usize| {
        s.map_or(or, |s| ((s.get().max(0.0) * hz) as usize).min(recording.samples()))
    };
    let (from, to) = (sample(options.from, 0), sample(options.to, recording.samples()));
    let seconds = to.saturating_sub(from) as f64 / hz;
    if seconds < SHORTEST_S {
        let why = Seconds::new(seconds).map(Reason::TooShort);
        return nothing(recording, why.into_iter().collect(), Vec::new());
    }
    let mut read = Read {
        beats: Vec::new(),
        groups: Vec::new(),
        series: None,
        remarks: Vec::new(),
        paced: false,
        holes: Vec::new(),
        used: Vec::new(),
        heights: Vec::new(),
    };
    let mut typical = None;
    let piece = (PIECE_S * hz) as usize;
    let mut at = from;
    while at < to {
        // A last piece too short to stand alone belongs to the one before.
        let end = if to - at < piece + piece / 4 { to } else { at + piece };
        let cleaned = clean(recording, at, end);
        if !piece_read(&cleaned, at as f64 / hz, learned, &mut read) {
            read.holes.push((at as f64 / hz, end as f64 / hz));
            if !read.remarks.contains(&Reason::MissingSamples) {
                read.remarks.push(Reason::MissingSamples);
            }
        }
        if typical.is_none() {
            typical = median_beat(&cleaned, &read, at as f64 / hz);
        }
        at = end;
    }
    if read.used.is_empty() {
        let remarks = std::mem::take(&mut read.remarks);
        return nothing(recording, vec![Reason::NoUsableLead], remarks);
    }
    let holed =
        |from: f64, to: f64| read.holes.iter().any(|(start, end)| from < *end && to > *start);
    let rr: Vec<f64> = read
        .beats
        .windows(2)
        .map(|w| if holed(w[0].r_s, w[1].r_s) { f64::NAN } else { (w[1].r_s - w[0].r_s) * 1000.0 })
        .collect();
    let normal: Vec<bool> = read.beats.iter().map(|beat| beat.normal).collect();
    read.series = series(&rr, &normal);
    leave_out_early(&mut read, &rr);
    build(recording, &read, typical)
}

/// A measurement of nothing.
fn nothing(recording: &Recording, why: Vec<Reason>, remarks: Vec<Reason>) -> Measurement {
    Measurement {
        answer: Answer::None(why),
        remarks,
        rr: None,
        rate: None,
        rhythm: None,
        intervals: None,
        qrs: None,
        paced: false,
        per_lead: recording.leads().iter().map(|signal| unread(&signal.lead)).collect(),
        beats: Vec::new(),
        median: None,
    }
}

fn unread(lead: &Lead) -> LeadReading {
    LeadReading { lead: lead.clone(), qt: None, qrs: None, t_amplitude: None, used: false }
}

/// Finds and reads the beats of one piece that begins `start_s` into the file; `false` where nothing of it could be
/// used.
fn piece_read(
    cleaned: &Cleaned,
    start_s: f64,
    learned: Option<&Reader>,
    read_all: &mut Read,
) -> bool {
    for remark in &cleaned.remarks {
        if !read_all.remarks.contains(remark) {
            read_all.remarks.push(remark.clone());
        }
    }
    let r = beats::r_peaks(&cleaned.leads);
    if r.len() < 2 {
        return false;
    }
    let places: Vec<usize> = cleaned.leads.iter().map(|lead| lead.place).collect();
    if read_all.used.is_empty() {
        read_all.used = places;
    } else if read_all.used != places {
        return false; // another set of leads than before: its marks could not be set beside theirs
    }
    let uv: Vec<&[f32]> = cleaned.leads.iter().map(|lead| lead.uv.as_slice()).collect();
    let beats = Beats { leads: &uv, hz: HZ as f32, r: &r };
    let normal = dominant(&uv, &r);
    // A pacemaker paces most beats; a spike now and then is an artefact.
    let near = |peak: usize| {
        cleaned
            .spikes
            .iter()
            .any(|spike| spike.abs_diff(peak) < (0.3 * HZ) as usize && *spike <= peak + 20)
    };
    read_all.paced |= r.iter().filter(|peak| near(**peak)).count() * 3 > r.len();
    if read_all.heights.is_empty() {
        read_all.heights = uv.iter().map(|lead| qrs_height(lead, &r)).collect();
    }
    let mut of_beat = vec![0; r.len()];
    for group in beats.all_groups() {
        for &beat in &group {
            of_beat[beat] = read_all.groups.len();
        }
        read_all.groups.push(read(&beats.average(&group), learned));
    }
    for (i, &peak) in r.iter().enumerate() {
        read_all.beats.push(ReadBeat {
            r_s: start_s + peak as f64 / HZ,
            normal: normal[i],
            group: of_beat[i],
        });
    }
    true
}

/// Typical height of a lead's QRS, µV.
fn qrs_height(lead: &[f32], r: &[usize]) -> f32 {
    let half = (0.08 * HZ) as usize;
    let mut heights: Vec<f32> = r
        .iter()
        .map(|&peak| {
            let part = &lead[peak.saturating_sub(half)..(peak + half).min(lead.len())];
            let (low, high) =
                part.iter().fold((f32::MAX, f32::MIN), |(l, h), v| (l.min(*v), h.max(*v)));
            high - low
        })
        .collect();
    heights.sort_by(f32::total_cmp);
    heights.get(heights.len() / 2).copied().unwrap_or(0.0)
}

/// A premature beat, and the beat after any that does not count, are left out: their QT is another rate's. Not where
/// the rhythm has no pattern, because there every beat is early or late.
fn leave_out_early(read: &mut Read, rr: &[f64]) {
    if read.series.as_ref().is_some_and(|series| series.rhythm == Rhythm::IrregularlyIrregular) {
        return;
    }
    let middle = median(&rr.iter().copied().filter(|rr| rr.is_finite()).collect::<Vec<_>>());
    let early: Vec<bool> =
        (0..read.beats.len()).map(|i| i > 0 && rr[i - 1] < 0.8 * middle).collect();
    let odd: Vec<bool> =
        read.beats.iter().zip(&early).map(|(beat, early)| !beat.normal || *early).collect();
    let counted = odd.iter().filter(|odd| !**odd).count();
    if counted * 3 < odd.len() {
        return; // bigeminy and the like: nothing would be left
    }
    for (i, beat) in read.beats.iter_mut().enumerate() {
        beat.normal = !odd[i] && (i == 0 || !odd[i - 1] || counted < 4);
    }
}

fn build(recording: &Recording, read: &Read, typical: Option<MedianBeat>) -> Measurement {
    let verdict = verdict::judge(read);
    let leads = recording.leads();
    let seconds = |r_s: f64, ms: f32| Seconds::new(r_s + f64::from(ms) / 1000.0);
    let beats = read
        .beats
        .iter()
        .filter_map(|beat| {
            let group = &read.groups[beat.group];
            let mut marks = vec![Marks::default(); leads.len()];
            for (place, lead) in read.used.iter().zip(&group.leads) {
                marks[*place] = Marks {
                    qrs_on: seconds(beat.r_s, lead.on),
                    qrs_off: seconds(beat.r_s, lead.off),
                    t_end: lead.t_end.and_then(|ms| seconds(beat.r_s, ms)),
                };
            }
            Some(Beat {
                r: Seconds::new(beat.r_s)?,
                kind: if beat.normal { BeatKind::Normal } else { BeatKind::Other },
                global: Marks {
                    qrs_on: seconds(beat.r_s, group.on),
                    qrs_off: seconds(beat.r_s, group.off),
                    t_end: group.t_end.and_then(|ms| seconds(beat.r_s, ms)),
                },
                leads: marks,
            })
        })
        .collect();
    let of_lead = |at: usize, pick: &dyn Fn(&crate::reading::LeadRead) -> Option<f32>| {
        verdict.over_beats(read, &|group| group.leads.get(at).and_then(pick))
    };
    let per_lead = leads
        .iter()
        .enumerate()
        .map(|(place, signal)| match read.used.iter().position(|used| *used == place) {
            None => unread(&signal.lead),
            Some(at) => LeadReading {
                lead: signal.lead.clone(),
                qt: of_lead(at, &|lead| Some(lead.t_end? - lead.on)).and_then(Ms::new),
                qrs: of_lead(at, &|lead| Some(lead.off - lead.on)).and_then(Ms::new),
                t_amplitude: of_lead(at, &|lead| Some(lead.wave?.amplitude))
                    .and_then(Microvolts::new),
                used: true,
            },
        })
        .collect();
    let rr = read.series.as_ref().and_then(|series| Ms::new(series.mean_ms));
    let intervals = match &verdict.answer {
        Answer::None(_) => None,
        Answer::Good | Answer::Doubtful(_) => verdict.qt.zip(verdict.qrs).and_then(|(qt, qrs)| {
            Some(Intervals {
                qrs: Ms::new(qrs)?,
                qt: Ms::new(qt)?,
                qt_doubt: Ms::new(verdict.doubt)?,
                jt: Ms::new(qt - qrs)?,
                t_end_method: TEndMethod::Threshold,
                qt_tangent: verdict.tangent.and_then(Ms::new),
                qt_threshold: Ms::new(qt),
            })
        }),
    };
    Measurement {
        rr,
        rate: rr.and_then(|rr| PerMinute::new(60_000.0 / rr.get())),
        rhythm: read.series.as_ref().map(|series| series.rhythm),
        intervals,
        qrs: verdict.qrs.and_then(Ms::new),
        paced: read.paced,
        per_lead,
        beats,
        median: typical,
        remarks: verdict.remarks,
        answer: verdict.answer,
    }
}

/// The median of the counted beats of a piece, sample by sample, with the marks of their most common group.
fn median_beat(cleaned: &Cleaned, read: &Read, start_s: f64) -> Option<MedianBeat> {
    const MOST: usize = 30;
    const BEFORE_S: f64 = 0.3;
    let counted: Vec<&ReadBeat> = read.beats.iter().filter(|beat| beat.normal).take(MOST).collect();
    let count = |group: usize| counted.iter().filter(|beat| beat.group == group).count();
    let group = counted
        .iter()
        .map(|beat| beat.group)
        .max_by_key(|group| (count(*group), usize::MAX - group))?;
    let marks = read.groups.get(group)?;
    let after = f64::from((marks.last + 190.0).clamp(500.0, 1100.0)) / 1000.0;
    let (before, after) = ((BEFORE_S * HZ) as usize, (after * HZ) as usize);
    let like: Vec<&&ReadBeat> = counted.iter().filter(|beat| beat.group == group).collect();
    let at = |ms: f32| Ms::new(f64::from(ms) + BEFORE_S * 1000.0);
    let leads = cleaned
        .leads
        .iter()
        .zip(&marks.leads)
        .map(|(lead, own)| MedianLead {
            lead: lead.lead.clone(),
            uv: median_of(lead, &like, start_s, before, after),
            t_end_tangent: own.wave.and_then(|wave| at(wave.tangent)),
            t_end_threshold: own.wave.and_then(|wave| at(wave.threshold)),
        })
        .collect();
    Some(MedianBeat {
        sampling_hz: HZ,
        qrs_on: at(marks.on)?,
        qrs_off: at(marks.off)?,
        t_end: marks.t_end.and_then(at),
        leads,
    })
}

fn median_of(
    lead: &Clean,
    like: &[&&ReadBeat],
    start_s: f64,
    before: usize,
    after: usize,
) -> Vec<f32> {
    let peaks: Vec<usize> =
        like.iter().map(|beat| ((beat.r_s - start_s) * HZ).round() as usize).collect();
    let level = |peak: usize| {
        let part = lead.uv.get(peak.saturating_sub(50)..peak.saturating_sub(20)).unwrap_or(&[]);
        part.iter().sum::<f32>() / part.len().max(1) as f32
    };
    let levels: Vec<f32> = peaks.iter().map(|peak| level(*peak)).collect();
    (0..before + after)
        .map(|i| {
            let mut values: Vec<f32> = peaks
                .iter()
                .zip(&levels)
                .filter_map(|(peak, level)| {
                    Some(lead.uv.get((peak + i).checked_sub(before)?)? - level)
                })
                .collect();
            values.sort_by(f32::total_cmp);
            values.get(values.len() / 2).copied().unwrap_or(0.0)
        })
        .collect()
}
