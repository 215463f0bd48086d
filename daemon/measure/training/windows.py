"""Averaged beats of every development record, computed by the Rust that also computes them when measuring."""
import subprocess
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.signal import butter, find_peaks, resample_poly, sosfiltfilt

import nets
import records

ROOT = Path(__file__).resolve().parents[3]
HZ = 500


@dataclass
class Windows:
    """One record: beats found, ms to the next, averaged tracks, and the experts' marks in ms after R."""

    kind: str
    name: str
    hz: float
    r: np.ndarray  # samples of the file, fractional for upsampled records
    rr: np.ndarray  # ms; NaN for the last beat
    low: np.ndarray  # (beats, leads, 350)
    wide: np.ndarray  # (beats, leads, 275)
    both: np.ndarray  # (beats, 3): onset, end of QRS, T end for all leads together
    leads: np.ndarray  # (beats, leads, 3)

    @property
    def key(self):
        return self.kind, self.name


def band(x, low=None, high=None):
    """Zero-phase Butterworth, order 2 each way."""
    for limit, kind in ((low, "highpass"), (high, "lowpass")):
        if limit:
            x = sosfiltfilt(butter(2, limit, kind, fs=HZ, output="sos"), x, axis=0)
    return x


def r_peaks(x):
    """Peaks of the leads' summed 5-25 Hz slope, then the largest deflection within 60 ms."""
    slope = np.abs(np.gradient(band(x, 5, 25), axis=0))
    slope = np.minimum(slope / (np.percentile(slope, 98, axis=0) + 1e-9), 3)
    weight = 1 / (np.median(slope, axis=0) + 0.02)
    smooth = np.hanning(int(0.09 * HZ))
    s = np.convolve(slope @ (weight / weight.sum()), smooth / smooth.sum(), "same")
    found, _ = find_peaks(s, distance=int(0.22 * HZ))
    peaks = []
    for p in found:
        near = np.sort(s[found[abs(found - p) <= 4 * HZ]])
        if s[p] <= 0.36 * min(np.percentile(near, 85), np.median(near[-4:])):
            continue
        if peaks and p - peaks[-1] < 0.36 * HZ:
            if s[p] < 0.6 * s[peaks[-1]]:
                continue
            if s[peaks[-1]] < 0.45 * s[p]:
                peaks[-1] = p
                continue
        peaks.append(p)
    z = band(x, 3, 40)
    rms = np.sqrt(((z / (np.percentile(abs(z), 99, axis=0) + 1e-9)) ** 2).mean(1))
    at = [max(0, p - 30) + int(np.argmax(rms[max(0, p - 30):p + 31])) for p in peaks]
    return np.array(sorted(set(at)), int)


def averages(x, r):
    """x (samples, leads) at HZ -> rr, low and wide tracks, by the crate's own code."""
    beats, leads = len(r), x.shape[1]
    head = np.array([leads, len(x), beats], "<u4").tobytes() + np.array([HZ], "<f4").tobytes()
    body = np.ascontiguousarray(x.T, "<f4").tobytes() + np.asarray(r, "<u4").tobytes()
    done = subprocess.run([ROOT / "target/release/examples/training_windows"], input=head + body,
                          stdout=subprocess.PIPE, check=True)
    n, w = nets.T.track_points, nets.QRS.track_points
    out = np.frombuffer(done.stdout, "<f4").reshape(beats, 1 + leads * (n + w))
    split = 1 + leads * n
    return out[:, 0], out[:, 1:split].reshape(beats, leads, n), out[:, split:].reshape(beats, leads, w)


def build():
    subprocess.run(["cargo", "build", "-q", "--release", "-p", "ebbmark-measure", "--example", "training_windows"],
                   cwd=ROOT, check=True)


def one(base, kind, name):
    x, hz = records.signal(base, kind, name)
    both, leads = records.experts(base, kind, name, hz)
    first = 0
    if kind == "qtdb":  # the marked stretch with its surroundings
        first = max(0, int(both.r.min() - 25 * hz))
        x = x[first:int(both.r.max() + 25 * hz)]
        x = resample_poly(x, HZ, int(hz), axis=0)
    at = r_peaks(x)
    rr, low, wide = averages(band(x, low=0.5), at)
    rr = rr.astype(float)
    rr[-1] = np.nan
    r = at * hz / HZ + first
    marks = records.relative(both, r, hz)
    keep = np.ones(len(r), bool)
    if kind == "qtdb":
        marked = np.isfinite(marks).any(1)
        keep = np.convolve(marked, np.ones(9), "same") > 0
    each = np.stack([records.relative(lead, r, hz) for lead in leads], 1)
    return Windows(kind, name, hz, r[keep], rr[keep], low[keep], wide[keep], marks[keep], each[keep])


def everything():
    build()
    base = records.folder()
    return [one(base, kind, name) for kind in ("ludb", "qtdb") for name in records.names(base, kind)]
