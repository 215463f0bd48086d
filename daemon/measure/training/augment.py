"""Batches of windows, and what is done to them so that the net learns the wave and not the record.

Stretching in time about the R peak keeps the net from guessing the T end from how long beats usually are.
"""
import jax
import jax.numpy as jnp
import numpy as np

import nets


def _uniform(key, low, high, shape=()):
    return jax.random.uniform(key, shape, minval=low, maxval=high)


def _noise(keys, times, shape, level, centre):
    """Smooth noise, a slope, an offset and a slow wave, all of one level that differs from draw to draw."""
    leads, points = shape
    level = level * jnp.exp(_uniform(keys[0], -2.5, 0.0, (1, 1)) + 0.4 * jax.random.normal(keys[1], (leads, 1)))
    e = jax.random.normal(keys[2], (leads, points + 4))
    e = (e[:, :-4] + 2 * e[:, 1:-3] + 3 * e[:, 2:-2] + 2 * e[:, 3:-1] + e[:, 4:]) / 4.36
    u = (times - centre) / 600.0
    slow = jnp.sin(3.1 * u + _uniform(keys[3], 0.0, 6.28, (leads, 1)))
    return level * (e + 2 * (jax.random.normal(keys[4], (leads, 1)) * u + jax.random.normal(keys[5], (leads, 1)) * slow))


def t_window(key, track, rr, mask, t_end, how):
    """-> inputs, stretch, shift: a mark at `ms` is now at `ms * stretch + shift`."""
    keys = jax.random.split(key, 24)
    t, leads = nets.T.times, track.shape[0]
    stretch, shift = jnp.exp(_uniform(keys[0], -how["stretch"], how["stretch"])), _uniform(keys[1], -24.0, 24.0)
    hold = jnp.clip(jnp.minimum(rr - 60.0, 1090.0) * stretch + shift, 250.0, 1000.0)
    x = nets.sample(nets.T, track, (jnp.minimum(t, hold) - shift) / stretch)
    x = x * jnp.sign(_uniform(keys[2], -1.0, 1.0, (leads, 1)))
    # ST and T louder or fainter.
    gain = jnp.exp(_uniform(keys[4], -1.0, 0.4, (1, 1)) + 0.2 * jax.random.normal(keys[5], (leads, 1)))
    after = jax.nn.sigmoid((t - 120.0 * stretch - shift) / (15.0 * stretch))
    x = jnp.where(_uniform(keys[3], 0.0, 1.0) < how["t_gain"], x * (1 + (gain - 1) * after), x)
    # A T of two phases that ends where this one ends: less of itself, some ms earlier.
    earlier = x[:, jnp.minimum(jnp.arange(nets.T.points) + jax.random.randint(keys[7], (), 2, 10), nets.T.points - 1)]
    part = _uniform(keys[8], 0.3, 1.1, (leads, 1)) * (_uniform(keys[9], 0.0, 1.0, (leads, 1)) < 0.8)
    after = jax.nn.sigmoid((t - 110.0 * stretch - shift) / (10.0 * stretch))
    x = jnp.where(_uniform(keys[6], 0.0, 1.0) < how["two_phases"], x - after * part * (earlier - x[:, 49:50]), x)
    # A small U wave after the T end.
    size = jnp.sort(jnp.abs(x[:, 45:90]), axis=1)[:, 40:41] * jnp.sign(x[:, 45:90].mean(1, keepdims=True))
    size = size * _uniform(keys[11], 0.03, 0.25) * _uniform(keys[12], 0.5, 1.5, (leads, 1))
    at = jnp.where(jnp.isfinite(t_end), t_end * stretch + shift, 5000.0) + stretch * _uniform(keys[13], 70.0, 130.0)
    width = stretch * _uniform(keys[14], 22.0, 40.0)
    u_wave = (_uniform(keys[10], 0.0, 1.0) < how["u_wave"]) & (at + 2 * width < hold + 40)
    x = x + jnp.where(u_wave, size * jnp.exp(-0.5 * ((t - at) / width) ** 2), 0.0)
    x = x + _noise(keys[15:21], t, x.shape, how["noise_uv"], 200.0)
    held = x[:, jnp.clip((hold - nets.T.start) / nets.T.step, 0, nets.T.points - 1).astype(int)]
    return nets.t_inputs(jnp.where(t[None] > hold, held[:, None], x), hold, mask), stretch, shift


def qrs_window(key, track, rr, mask, onset, how):
    keys = jax.random.split(key, 18)
    t, leads = nets.QRS.times, track.shape[0]
    stretch, shift = jnp.exp(_uniform(keys[0], -how["stretch"], how["stretch"])), _uniform(keys[1], -32.0, 32.0)
    x = nets.sample(nets.QRS, track, (t - shift) / stretch)
    x = x * jnp.sign(_uniform(keys[2], -1.0, 1.0, (leads, 1)))
    # A pacing spike before some onsets: never part of the QRS.
    before = jnp.where(_uniform(keys[4], 0.0, 1.0) < 0.7, _uniform(keys[5], 5.0, 25.0), _uniform(keys[5], 60.0, 160.0))
    spiked = (_uniform(keys[3], 0.0, 1.0) < how["spike"]) & jnp.isfinite(onset)
    v = (t - (jnp.where(spiked, onset * stretch + shift, 0.0) - before)) / _uniform(keys[6], 3.5, 6.0)
    size = jnp.abs(x).max() * jnp.exp(_uniform(keys[7], -3.0, 0.2)) * jax.random.normal(keys[8], (leads, 1))
    two = _uniform(keys[9], 0.0, 1.0)
    x = x + jnp.where(spiked, size * (two * v * jnp.exp(0.5 - 0.5 * v * v) + (1 - two) * jnp.exp(-0.5 * v * v)), 0.0)
    x = x + _noise(keys[10:16], t, x.shape, how["noise_uv"], 0.0)
    return nets.qrs_inputs(x, mask), stretch, shift


class Batches:
    """Draws windows: twelve leads or some of them, two channels or one, some leads mixed into new ones.

    Every draw is `(tracks, mask, rr, marks for all leads, marks for each lead)`. A mixture of leads keeps the
    mark of all leads together and loses its own.
    """

    def __init__(self, records, view, which, rng):
        self.view, self.which, self.rng = view, which, rng
        self.pool = {"ludb": [], "qtdb": []}
        for w in records:
            usable = np.flatnonzero(np.isfinite(w.both[:, which[-1]]) & np.isfinite(w.rr))
            if len(usable):
                tracks = w.low if view is nets.T else w.wide
                self.pool[w.kind].append((tracks, w.rr, w.both[:, which], w.leads[:, :, which], usable))

    def _draw(self, kind):
        tracks, rr, both, leads, usable = self.pool[kind][self.rng.integers(len(self.pool[kind]))]
        beat = usable[self.rng.integers(len(usable))]
        return tracks[beat], rr[beat], both[beat], leads[beat]

    def _twelve(self):
        rng = self.rng
        x, rr, both, marks = self._draw("ludb")
        k = 12 if rng.random() < 0.6 else int(rng.choice([1, 2, 2, 3, 4, 6, 8]))
        chosen = rng.permutation(12)[:k]
        some, marks = x[chosen].copy(), marks[chosen].copy()
        if k <= 2:  # one reader marks one or two leads together
            known = np.isfinite(marks)
            both = np.where(known.any(0), np.where(known, marks, 0).sum(0) / np.maximum(known.sum(0), 1), np.nan)
        elif rng.random() < 0.5:
            for j in rng.permutation(k)[:rng.integers(1, k + 1)]:
                mix = rng.normal(size=12) * (rng.random(12) < 0.25)
                if mix.any():
                    some[j] = (mix / np.sqrt((mix**2).sum())) @ x
                    marks[j] = np.nan
        return some, rr, both, marks

    def _two(self):
        rng = self.rng
        x, rr, both, marks = self._draw("qtdb")
        if rng.random() < 0.3:
            turn = rng.random() * 2 * np.pi
            x = np.array([[np.cos(turn), np.sin(turn)], [-np.sin(turn), np.cos(turn)]], np.float32) @ x
        if rng.random() < 0.2:
            j = rng.integers(2)
            x, marks = x[j:j + 1], marks[j:j + 1]
        return x, rr, both, marks

    def _one(self, i):
        x, rr, _, marks = self._draw("ludb" if i % 2 else "qtdb")
        j = self.rng.integers(len(x))
        return x[j:j + 1], rr, marks[j], marks[j:j + 1]

    def _stack(self, draws, leads):
        n, m = len(draws), len(self.which)
        tracks = np.zeros((n, leads, self.view.track_points), np.float32)
        mask, rr = np.zeros((n, leads), np.float32), np.zeros(n, np.float32)
        both, each = np.full((n, m), np.nan, np.float32), np.full((n, leads, m), np.nan, np.float32)
        for i, (x, r, b, marks) in enumerate(draws):
            k = len(x)
            tracks[i, :k] = x * np.exp(0.3 * self.rng.normal())
            mask[i, :k], rr[i], both[i], each[i, :k] = 1, r, b, marks
        return tracks, mask, rr, both, each

    def next(self, twelve, two, one):
        out = [self._stack([self._twelve() for _ in range(twelve)], 12), self._stack([self._two() for _ in range(two)], 2)]
        if one:
            out.append(self._stack([self._one(i) for i in range(one)], 1))
        return out
