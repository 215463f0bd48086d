"""The net and what it sees: the same as `src/learned/net.rs` and `features.rs`, in JAX."""
from dataclasses import dataclass

import jax
import jax.numpy as jnp
import numpy as np


@dataclass(frozen=True)
class View:
    """A net's grid of time and the track it is taken from, ms after the R peak."""

    start: float
    step: float
    points: int
    track_step: float
    track_points: int
    spread: float  # width of the Gaussian target, ms
    inside: tuple  # marks outside this range are not learned

    @property
    def times(self):
        return self.start + self.step * jnp.arange(self.points)


TRACK_START = -300.0
T = View(-280.0, 8.0, 160, 4.0, 350, 10.0, (0.0, 980.0))
QRS = View(-240.0, 4.0, 96, 2.0, 275, 4.8, (-235.0, 135.0))
CHANNELS = 7


def sample(view, track, ms):
    """Catmull-Rom values of `track` (leads, points) at times `ms`."""
    at = jnp.clip((ms - TRACK_START) / view.track_step, 1.0, view.track_points - 3.001)
    i = jnp.floor(at).astype(int)
    f = at - i
    a, b, c, d = track[:, i - 1], track[:, i], track[:, i + 1], track[:, i + 2]
    return b + 0.5 * f * (c - a + f * (2 * a - 5 * b + 4 * c - d + f * (3 * (b - c) + d - a)))


def _ranked(x, rank):
    return jnp.sort(x, axis=-1)[..., rank]


def _rms(x, mask):
    n = jnp.maximum(mask.sum(), 1)
    return jnp.sqrt((mask[:, None] * x * x).sum(0) / n + 1e-6)


def t_inputs(x, hold, mask):
    """x (leads, points) in uV, constant from `hold` ms on -> (leads, points, channels)."""
    last = T.points - 1
    base = jnp.clip((hold - T.start) / T.step - jnp.arange(15), 0, last).astype(int)
    x = x - jnp.median(x[:, base], axis=1)[:, None]
    until = jnp.minimum(600.0, 0.75 * (hold + 60.0))
    window = jnp.clip((100.0 + (until - 100.0) * jnp.arange(40) / 39.0 - T.start) / T.step, 0, last).astype(int)
    high = lambda v: _ranked(jnp.abs(v[..., window]), 38)
    slope = jnp.gradient(x, axis=1)
    own, own_slope = high(x)[:, None] + 5.0, high(slope)[:, None] + 0.5
    rms, rms_slope, even = _rms(x, mask), _rms(slope, mask), _rms(slope / own_slope, mask)
    size = high(rms) + 5.0
    wide = lambda v: jnp.broadcast_to(v, x.shape)
    squash = lambda v: jnp.tanh(0.7 * v)
    channels = [squash(x / own), squash(slope / own_slope), squash(x / size), wide(squash(rms / size)),
                wide(squash(rms_slope / (high(rms_slope) + 0.5))), wide(squash(even / (high(even) + 0.02))),
                wide((T.times > hold).astype(jnp.float32))]
    return jnp.stack(channels, -1) * mask[:, None, None]


def qrs_inputs(x, mask):
    high = lambda v: _ranked(jnp.abs(v), 92)
    log = lambda ratio: jnp.log(ratio + 0.01) * 0.4 + 0.9
    slope = jnp.gradient(x, axis=1)
    own, own_slope = high(x)[:, None] + 10.0, high(slope)[:, None] + 1.0
    rms, rms_slope, even = _rms(x, mask), _rms(slope, mask), _rms(slope / own_slope, mask)
    size, common = high(rms) + 10.0, high(rms_slope) + 1.0
    wide = lambda v: jnp.broadcast_to(v, x.shape)
    channels = [jnp.tanh(2 * x / own), jnp.tanh(2 * x / size), log(jnp.abs(slope) / own_slope),
                log(jnp.abs(slope) / common), wide(log(rms_slope / common)),
                wide(log(even / (high(even) + 0.02))), wide(jnp.tanh(2 * rms / size))]
    return jnp.stack(channels, -1) * mask[:, None, None]


def hold_at(rr):
    return jnp.clip(rr - 60.0, 300.0, 1000.0)


def plain_t(track, rr, mask):
    hold = hold_at(rr)
    return t_inputs(sample(T, track, jnp.minimum(T.times, hold)), hold, mask)


def plain_qrs(track, rr, mask):
    return qrs_inputs(sample(QRS, track, QRS.times), mask)


# ---------------------------------------------------------------------------------------------- the net

def init(key, size):
    """size: encoder, trunk and decoder channels, taps, dilations, outputs."""
    e, h, d, k, out = (size[n] for n in ("encoder", "trunk", "decoder", "taps", "outputs"))
    weights = {}

    def conv(name, taps, inputs, outputs, gain=1.0):
        nonlocal key
        key, sub = jax.random.split(key)
        weights[name + "w"] = gain * np.sqrt(2 / (taps * inputs)) * jax.random.normal(sub, (taps, inputs, outputs))
        weights[name + "b"] = jnp.zeros(outputs)

    conv("e1", 7, CHANNELS, e)
    conv("e2", 7, e, e, 0.7)
    conv("in", 1, 2 * e + 1, h)
    for i in range(len(size["dilations"])):
        conv(f"t{i}", k, h, h, 0.5)
    conv("go", 1, 2 * h, out, 0.3)
    conv("di", 1, h, d)
    conv("d0", k, e + d, d)
    conv("d1", k, d, d, 0.5)
    conv("lo", 1, 2 * d, out, 0.3)
    return weights


def forward(w, x, mask, dilations):
    """x (beats, leads, points, channels), mask (beats, leads)
    -> logits for all leads (beats, outputs, points) and for each (beats, leads, outputs, points)."""
    beats, leads, points = x.shape[:3]

    def conv(v, name, dilation=1):
        y = jax.lax.conv_general_dilated(v, w[name + "w"], (1,), "SAME", rhs_dilation=(dilation,),
                                         dimension_numbers=("NWC", "WIO", "NWC"))
        return y + w[name + "b"]

    h = jax.nn.relu(conv(x.reshape(beats * leads, points, -1), "e1"))
    h = h + jax.nn.relu(conv(h, "e2", 2))
    each, m = h.reshape(beats, leads, points, -1), mask[:, :, None, None]
    n = jnp.maximum(mask.sum(1), 1)[:, None, None]
    few = jnp.broadcast_to(2.0 / n, (beats, points, 1))
    z = jnp.concatenate([(each * m).sum(1) / n, (each * m).max(1), few], -1)
    z = jax.nn.relu(conv(z, "in"))
    for i, dilation in enumerate(dilations):
        z = z + jax.nn.relu(conv(z, f"t{i}", dilation))
        if i == 1:
            early = z
    together = conv(jnp.concatenate([early, z], -1), "go")
    context = jnp.broadcast_to(conv(z, "di")[:, None], (beats, leads, points, w["dib"].shape[0]))
    y = jax.nn.relu(conv(jnp.concatenate([h, context.reshape(beats * leads, points, -1)], -1), "d0", 2))
    deep = y + jax.nn.relu(conv(y, "d1", 4))
    alone = conv(jnp.concatenate([y, deep], -1), "lo").reshape(beats, leads, points, -1)
    return jnp.moveaxis(together, -1, -2), jnp.moveaxis(alone, -1, -2)


def loss(view, logits, ms):
    """Cross-entropy against a Gaussian about the mark with 4 % spread evenly; 0 where there is no mark.
    logits (..., points), ms (...)."""
    known = jnp.isfinite(ms) & (ms > view.inside[0]) & (ms < view.inside[1])
    at = jnp.where(known, ms, 0.5 * sum(view.inside))
    bell = jnp.exp(-0.5 * ((view.times - at[..., None]) / view.spread) ** 2)
    target = 0.96 * bell / (bell.sum(-1, keepdims=True) + 1e-9) + 0.04 / view.points
    return -(jax.nn.log_softmax(logits, -1) * target).sum(-1) * known, known
