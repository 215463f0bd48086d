"""The two open sets: signals, and the experts' marks relative to the beats found.

LUDB (doi 10.13026/eegm-h675, ODC-By 1.0): 12 leads, 10 s, 500 Hz, every lead marked by cardiologists.
QTDB (doi 10.13026/C24K53, ODC-By 1.0): 2 channels, 15 min, 250 Hz, one expert's marks on a stretch (.q1c).
"""
import os
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import wfdb

LEADS = ["i", "ii", "iii", "avr", "avl", "avf", "v1", "v2", "v3", "v4", "v5", "v6"]
NOT_BEATS = set('()ptu|+~"=^[]!x@*DTs')
ON, OFF, T_END = range(3)


@dataclass
class Marked:
    """Beats of one reader: samples of R, QRS onset, QRS end, T end; NaN where not marked."""

    r: np.ndarray
    marks: np.ndarray  # (beats, 3)


def folder():
    """Where the sets are: EBBMARK_OPEN_ECG, else beside the project."""
    named = os.environ.get("EBBMARK_OPEN_ECG")
    root = Path(__file__).resolve().parents[3]
    path = Path(named) if named else root.parent / "shared" / "open-ecg"
    if not path.is_dir():
        raise SystemExit(f"{path}: no such folder; set EBBMARK_OPEN_ECG to where ludb/ and qtdb/ are")
    return path


def names(base, kind):
    found = sorted(p.stem for p in (base / kind).glob("*.hea"))
    if not found:
        raise SystemExit(f"{base / kind}: holds no records")
    return found


def signal(base, kind, name):
    """(samples, leads) in uV and the rate."""
    values, fields = wfdb.rdsamp(str(base / kind / name))
    return np.nan_to_num(values) * 1000.0, float(fields["fs"])


def _ludb_lead(path, lead):
    """A peak with the boundaries around it; the first T after a QRS is that beat's."""
    a = wfdb.rdann(path, lead)
    s, x = a.symbol, a.sample
    rows, open_t = [], False
    for i, kind in enumerate(s):
        if kind not in ("N", "t", "p"):
            continue
        doubled = (i > 0 and s[i - 1] == kind) or (i + 1 < len(s) and s[i + 1] == kind)
        on = x[i - 1] if i > 0 and s[i - 1] == "(" else np.nan
        off = x[i + 1] if i + 1 < len(s) and s[i + 1] == ")" else np.nan
        if kind == "N":
            # An onset on the peak itself cannot be written beside it.
            rows.append([x[i], x[i] if np.isnan(on) else on, off, np.nan])
            open_t = True
        elif kind == "t" and open_t:
            rows[-1][3] = np.nan if doubled else off
            open_t = False
    rows = np.array(rows, float).reshape(-1, 4)
    return Marked(rows[:, 0], rows[:, 1:])


def _qtdb(path):
    """The number of a boundary says which wave it bounds: 1 QRS, 2 T, 3 U."""
    a = wfdb.rdann(path, "q1c")
    rows, onset, open_t = [], np.nan, False
    for kind, x, wave in zip(a.symbol, a.sample, a.num):
        if kind == "(" and wave == 1:
            onset = x
        elif kind == ")" and rows and wave == 1 and np.isnan(rows[-1][2]):
            rows[-1][2] = x
        elif kind == ")" and rows and wave == 2 and open_t:
            rows[-1][3] = x
            open_t = False
        elif kind not in NOT_BEATS:
            rows.append([x, onset, np.nan, np.nan])
            onset, open_t = np.nan, True
    rows = np.array(rows, float).reshape(-1, 4)
    return Marked(rows[:, 0], rows[:, 1:])


def consensus(leads, hz, least=3):
    """Per beat over leads: second earliest onset, second latest T end (so one outlier lead sets neither)."""
    peaks = np.sort(np.concatenate([m.r for m in leads]))
    groups = np.split(peaks, np.flatnonzero(np.diff(peaks) > 0.075 * hz) + 1) if len(peaks) else []
    r, rows = [], []
    for group in groups:
        centre = np.median(group)
        marks = np.array([m.marks[np.argmin(abs(m.r - centre))] for m in leads
                          if len(m.r) and abs(m.r - centre).min() <= 0.075 * hz])
        second = []
        for which, rank in ((ON, 1), (OFF, -2), (T_END, -2)):
            known = np.sort(marks[np.isfinite(marks[:, which]), which])
            second.append(known[rank] if len(known) >= least else np.nan)
        r.append(centre)
        rows.append(second)
    return Marked(np.array(r), np.array(rows, float).reshape(-1, 3))


def experts(base, kind, name, hz):
    """The marks for all leads together, and for each lead."""
    path = str(base / kind / name)
    if kind == "qtdb":
        both = _qtdb(path)
        return both, [both, both]
    leads = [_ludb_lead(path, lead) for lead in LEADS]
    return consensus(leads, hz), leads


def relative(marked, r, hz):
    """Marks in ms after each found R peak: (beats, 3). A marked beat belongs to the nearest found peak,
    within 75 ms or where that peak lies inside the marked QRS."""
    out = np.full((len(r), 3), np.nan)
    if not len(r):
        return out
    for peak, (on, off, t_end) in zip(marked.r, marked.marks):
        nearest = int(np.argmin(abs(r - peak)))
        if abs(r[nearest] - peak) < 0.075 * hz or on <= r[nearest] <= off:
            out[nearest] = (np.array([on, off, t_end]) - r[nearest]) / hz * 1000.0
    return out
