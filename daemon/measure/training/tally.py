"""Errors of the nets alone on records they were not trained on, automatic minus expert, ms.

A quick tally for the card and for choosing; the figures that count come from measuring the files as a whole.
"""
import numpy as np

import nets
import records

NEAR = {"T": 8, "QRS": 4}  # points about the mode whose mean is the mark
GLOBAL_QUANTILE = 0.6


def pooled(several):
    """Log-mean of the nets' log-probabilities, normalised."""
    x = np.mean(several, axis=0)
    x = x - x.max(-1, keepdims=True)
    return np.exp(x) / np.exp(x).sum(-1, keepdims=True)


def place(p, view, near, quantile=None):
    """The mark, ms after R, of probabilities (..., points): mean, or quantile, near the mode."""
    flat = p.reshape(-1, p.shape[-1])
    out = np.empty(len(flat))
    half = near if quantile is None else 12
    for i, row in enumerate(flat):
        mode = int(np.argmax(np.convolve(row, np.ones(5), "same")))
        first = max(0, mode - half)
        part = row[first:mode + half + 1]
        if quantile is None:
            at = first + (part * np.arange(len(part))).sum() / part.sum()
        else:
            below = np.cumsum(part) / part.sum()
            k = int(np.searchsorted(below, quantile))
            before = below[k - 1] if k else 0.0
            at = first + k - 0.5 + (quantile - before) / (below[k] - before)
        out[i] = view.start + view.step * at
    return out.reshape(p.shape[:-1])


def marks(record, answers):
    """Marks for all leads together (beats, 3) and for each (beats, leads, 3): onset, end of QRS, T end."""
    both, each = [np.full(v.shape, np.nan) for v in (record.both, record.leads)]
    for start, view, which in (("t-end", nets.T, [records.T_END]), ("qrs", nets.QRS, [records.ON, records.OFF])):
        found = [a[record.key] for name, a in answers.items() if name.startswith(start)]
        if not found:
            continue
        near = NEAR["T" if view is nets.T else "QRS"]
        late = view is nets.T and record.kind == "ludb"
        both[:, which] = place(pooled([f[0] for f in found]), view, near, GLOBAL_QUANTILE if late else None)
        each[:, :, which] = place(pooled([f[1] for f in found]), view, near)
    return both, each


def _spread(errors):
    """Count, mean, SD, robust SD, % off by more than 50 ms; as the project's scorer, T ends more than 150 ms
    off count as not found."""
    e = np.concatenate(errors)
    e = e[np.isfinite(e)]
    near = e[abs(e) <= 150]
    if len(near) < 2:
        return None
    middle = np.median(near)
    return dict(n=len(e), found_pct=round(100 * len(near) / len(e), 1), mean=round(near.mean(), 1),
                sd=round(near.std(ddof=1), 1), robust_sd=round(1.4826 * np.median(abs(near - middle)), 1),
                off50_pct=round(100 * np.mean(abs(near) > 50), 1))


def _qt(pairs):
    e = np.array([read - true for true, read in pairs])
    e = e[np.isfinite(e)]
    if not len(e):
        return None
    return dict(n=len(e), mean=round(e.mean(), 1), within20_pct=round(100 * np.mean(abs(e) <= 20), 1),
                within30_pct=round(100 * np.mean(abs(e) <= 30), 1), off50_pct=round(100 * np.mean(abs(e) > 50), 1))


def tally(data, answers):
    """The card's figures for these records."""
    kept = dict(ludb_t=[], ludb_on=[], qtdb_t=[], qtdb_on=[])
    qt = dict(ludb_all_leads=[], ludb_lead_ii=[], qtdb_one_answer=[])
    median = lambda v: np.median(v[np.isfinite(v)]) if np.isfinite(v).any() else np.nan
    for record in data:
        if any(record.key not in a for a in answers.values()):
            continue
        both, each = marks(record, answers)
        wrong, wrong_each = both - record.both, each - record.leads
        length = lambda m: median(m[..., records.T_END] - m[..., records.ON])
        marked = np.isfinite(record.both[:, [records.ON, records.T_END]]).all(1)
        if record.kind == "ludb":
            kept["ludb_t"].append(wrong[:, records.T_END])
            kept["ludb_on"].append(wrong[:, records.ON])
            qt["ludb_all_leads"].append((length(record.both[marked]), length(both[marked])))
            own = np.isfinite(record.leads[:, 1][:, [records.ON, records.T_END]]).all(1)
            qt["ludb_lead_ii"].append((length(record.leads[own, 1]), length(each[own, 1])))
        else:
            best = np.take_along_axis(wrong_each, np.argmin(np.nan_to_num(abs(wrong_each), nan=1e9), 1)[:, None], 1)[:, 0]
            kept["qtdb_t"].append(best[:, records.T_END])
            kept["qtdb_on"].append(best[:, records.ON])
            qt["qtdb_one_answer"].append((length(record.both[marked]), length(both[marked])))
    out = {name: _spread(errors) for name, errors in kept.items() if errors}
    out.update({"qt_" + name: _qt(pairs) for name, pairs in qt.items() if pairs})
    return out


def scores(data, answers, fold):
    """All folds together, and each."""
    out = dict(all=tally(data, answers))
    for k in range(fold.max() + 1):
        out[f"fold {k}"] = tally([d for d, f in zip(data, fold) if f == k], answers)
    return out
