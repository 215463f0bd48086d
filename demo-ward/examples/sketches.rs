//! Writes one tracing of each kind as CSV into a folder, with its truth on standard output: to look at.
//! `cargo run -p ebbmark-demo-ward --example sketches -- FOLDER`

use chrono::DateTime;
use ebbmark_demo_ward::synth::{Electrode, Noise, Pace, QrsShape, Sketch, TShape, synthesise};
use ebbmark_demo_ward::write::{Label, csv_tracing, dicom, wfdb};

fn main() -> Result<(), Box<dyn std::error::Error>> {
    let folder = std::env::args().nth(1).ok_or("which folder?")?;
    let usual = Sketch::default;
    let sketches = [
        ("normal", usual()),
        ("long", Sketch { qt_ms: 520.0, rate_per_min: 58.0, heart: 2, ..usual() }),
        ("short-fast", Sketch { qt_ms: 290.0, rate_per_min: 125.0, heart: 3, ..usual() }),
        ("flat", Sketch { t: TShape::Flat, heart: 4, ..usual() }),
        ("biphasic", Sketch { t: TShape::Biphasic, qt_ms: 440.0, ..usual() }),
        ("notched", Sketch { t: TShape::Notched, qt_ms: 480.0, ..usual() }),
        ("inverted", Sketch { t: TShape::Inverted, ..usual() }),
        ("peaked", Sketch { t: TShape::Peaked, qt_ms: 380.0, ..usual() }),
        ("u-wave", Sketch { t: TShape::WithU, qt_ms: 400.0, rate_per_min: 55.0, ..usual() }),
        (
            "af",
            Sketch { pace: Pace::AtrialFibrillation, rate_per_min: 92.0, qt_ms: 370.0, ..usual() },
        ),
        ("ectopics", Sketch { pace: Pace::Ectopics { every: 4 }, ..usual() }),
        ("lbbb", Sketch { qrs: QrsShape::LeftBundle, qrs_ms: 148.0, qt_ms: 450.0, ..usual() }),
        ("rbbb", Sketch { qrs: QrsShape::RightBundle, qrs_ms: 136.0, qt_ms: 430.0, ..usual() }),
        (
            "paced",
            Sketch {
                qrs: QrsShape::Paced,
                pace: Pace::Paced,
                qrs_ms: 160.0,
                qt_ms: 460.0,
                rate_per_min: 70.0,
                ..usual()
            },
        ),
        (
            "noisy",
            Sketch {
                noise: Noise {
                    wander_uv: 250.0,
                    mains_uv: 40.0,
                    muscle_uv: 40.0,
                    ..Noise::default()
                },
                ..usual()
            },
        ),
        (
            "unreadable",
            Sketch {
                noise: Noise {
                    wander_uv: 900.0,
                    mains_uv: 120.0,
                    muscle_uv: 420.0,
                    ..Noise::default()
                },
                ..usual()
            },
        ),
        (
            "v3-off",
            Sketch { noise: Noise { off: vec![Electrode::V3], ..Noise::default() }, ..usual() },
        ),
    ];
    for (name, sketch) in sketches {
        let (recording, truth) = synthesise(&sketch)?;
        let label = Label {
            patient_id: "T-0001".into(),
            issuer: "saltmarsh".into(),
            sex: None,
            birth_date: None,
            start: DateTime::parse_from_rfc3339("2026-03-02T09:00:00+00:00")?,
        };
        let at = |end: &str| std::path::Path::new(&folder).join(format!("{name}.{end}"));
        std::fs::write(at("csv"), csv_tracing(&recording, &label))?;
        std::fs::write(at("dcm"), dicom(&recording, &label))?;
        let files = wfdb(&recording, name, label.start.naive_local());
        std::fs::write(at("hea"), files.header)?;
        std::fs::write(at("dat"), files.samples)?;
        println!(
            "{name}: QT {:.0} ms to the baseline, {:.0} ms by tangent; QRS {:.0} ms; {:.0}/min",
            truth.qt_baseline_ms,
            truth.qt_tangent_ms,
            truth.qrs_ms,
            truth.rate_per_min()
        );
    }
    Ok(())
}
