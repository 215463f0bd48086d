"""Averaged beats of every development record, computed by the Rust that also computes them when measuring."""
from dataclasses import dataclass

import numpy as np

import nets
import program
import records

@dataclass
class Windows:
    """One record: beats found, ms to the next, averaged tracks, and the experts' marks in ms after R."""

    kind: str
    name: str
    hz: float
    r: np.ndarray  # samples of the file, fractional
    rr: np.ndarray  # ms; NaN for the last beat
    low: np.ndarray  # (beats, leads, 350)
    wide: np.ndarray  # (beats, leads, 275)
    both: np.ndarray  # (beats, 3): onset, end of QRS, T end for all leads together
    leads: np.ndarray  # (beats, leads, 3)

    @property
    def key(self):
        return self.kind, self.name


def averages(x, hz):
    """x (samples, leads) -> R peaks in seconds, rr in ms, low and wide tracks."""
    leads, n, w = x.shape[1], nets.T.track_points, nets.QRS.track_points
    out = np.frombuffer(program.run(x, hz, "windows"), "<f4").reshape(-1, 2 + leads * (n + w))
    beats, split = len(out), 2 + leads * n
    return (out[:, 0].astype(float), out[:, 1].astype(float), out[:, 2:split].reshape(beats, leads, n),
            out[:, split:].reshape(beats, leads, w))


def one(base, kind, name):
    x, hz = records.signal(base, kind, name)
    both, leads = records.experts(base, kind, name, hz)
    first = 0
    if kind == "qtdb":  # the marked stretch with its surroundings
        first = max(0, int(both.r.min() - 25 * hz))
        x = x[first:int(both.r.max() + 25 * hz)]
    seconds, rr, low, wide = averages(x, hz)
    rr[-1] = np.nan
    r = seconds * hz + first
    marks = records.relative(both, r, hz)
    keep = np.ones(len(r), bool)
    if kind == "qtdb":
        keep = np.convolve(np.isfinite(marks).any(1), np.ones(9), "same") > 0
    each = np.stack([records.relative(lead, r, hz) for lead in leads], 1)
    return Windows(kind, name, hz, r[keep], rr[keep], low[keep], wide[keep], marks[keep], each[keep])


def everything():
    program.build()
    base = records.folder()
    return [one(base, kind, name) for kind in ("ludb", "qtdb") for name in records.names(base, kind)]
