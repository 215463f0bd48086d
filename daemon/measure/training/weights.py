"""Writing the nets as text: whole numbers of at most 15 with a scale for every output; and their card."""
import jax
import jax.numpy as jnp
import numpy as np

import nets
import tally

MOST = 15


def _whole(w):
    scale = np.abs(w).reshape(-1, w.shape[-1]).max(0) / MOST + 1e-12
    scale = np.array([float(f"{s:.4g}") for s in scale])
    return np.clip(np.round(w / scale), -MOST, MOST).astype(int), scale


def rounded(weights):
    """The same weights as the file will hold, so that the scores are those of what ships."""
    out = {}
    for name, w in weights.items():
        w = np.asarray(w, float)
        if name.endswith("w"):
            whole, scale = _whole(w)
            out[name] = (whole * scale).astype(np.float32)
        else:
            out[name] = np.array([float(f"{v:.4g}") for v in w], np.float32)
    return out


def write(path, about, trained, recipe):
    lines = ["# " + line for line in about]
    for net, weights in trained.items():
        lines.append(f"net {net} dilations {' '.join(map(str, recipe[net]['size']['dilations']))}")
        for name in [n for n in weights if n.endswith("w")]:
            w = weights[name]
            whole, scale = _whole(np.asarray(w, float))
            lines.append(f"tensor {name} {' '.join(map(str, w.shape))}")
            lines.append("scale " + " ".join(f"{s:.4g}" for s in scale))
            lines += [" ".join(map(str, row)) for row in whole.reshape(-1, w.shape[-1])]
            bias = name[:-1] + "b"
            lines.append(f"bias {bias} " + " ".join(f"{v:.4g}" for v in weights[bias]))
    path.write_text("\n".join(lines) + "\n")


def card(recipe, seed, day, found):
    """What a reader of the weights has to know, as Markdown."""
    sizes = [f"- {n}: " + ", ".join(f"{k} {v}" for k, v in r["size"].items()) for n, r in recipe.items()]
    rows = [f"| {part} | {name} | " + ", ".join(f"{k} {v}" for k, v in f.items()) + " |"
            for part, figures in found.items() for name, f in figures.items() if f]
    return f"""# The learned reader's weights

Made by `training/train.py`; do not edit.

**Data.** 100 records of LUDB 1.0.1 (doi 10.13026/eegm-h675, ODC-By 1.0; Kalyakulina et al., IEEE Access 2020;8:186181) and
53 of the QT Database (doi 10.13026/C24K53, ODC-By 1.0; Laguna et al., Computers in Cardiology 1997;24:673): the development
halves, every record of them for these weights.

**Licence.** That of this project; the data sets ask to be named, as above.

**Made** {day.isoformat()}, seed {seed}. Stretched in time about the R peak by up to exp(0.4) either way; never told the rate,
the age or the sex.

**Use.** One voter on T end and QRS limits of an averaged beat of 1 to 15 leads. Few paced, few children and no ward recordings
are among the data; a wave unlike any in them can be read wrongly and confidently.

**Sizes**
{chr(10).join(sizes)}

**Scores on records not trained on.** 5 folds by record, one split; nets of the same recipe trained without the fold; the nets
alone, automatic minus expert, ms. `*_t` T end and `*_on` QRS onset per beat (LUDB: all leads together; QTDB: the better of two
leads), `qt_*` QT per record.

| records | what | figures |
|---|---|---|
{chr(10).join(rows)}
"""


def fixture(path, data, trained, recipe, views):
    """Averages of one beat, and what the nets make of them: what `src/learned/parity.rs` compares."""
    record = next(d for d in data if d.kind == "ludb")
    beat = len(record.r) // 2
    some = [0, 1, 7, 10]  # I, II, V2, V5
    low, wide = np.round(record.low[beat, some], 1), np.round(record.wide[beat, some], 1)
    rr = float(f"{record.rr[beat]:.1f}")
    lines = [f"rr {rr:.1f}"]
    lines += ["low " + " ".join(f"{v:.1f}" for v in lead) for lead in low]
    lines += ["wide " + " ".join(f"{v:.1f}" for v in lead) for lead in wide]
    add = lambda name, values, digits: lines.append(name + " " + " ".join(f"{v:.{digits}f}" for v in np.ravel(values)))
    for kind, start, tracks, outputs in (("T", "t-end", low, ["t"]), ("QRS", "qrs", wide, ["on", "off"])):
        plain, mask = views[kind][3], np.ones(len(tracks), np.float32)
        x = plain(jnp.asarray(tracks, jnp.float32), np.float32(rr), mask)
        add("t_input_0" if kind == "T" else "qrs_input_0", x[0], 4)
        answers = [nets.forward(w, x[None], mask[None], recipe[n]["size"]["dilations"])
                   for n, w in trained.items() if n.startswith(start)]
        both, each = ([np.asarray(jax.nn.log_softmax(a[i], -1)) for a in answers] for i in (0, 1))
        for i, name in enumerate(outputs):
            add(f"{name}_global", tally.pooled([b[0, i] for b in both]), 5)
            add(f"{name}_lead_0", tally.pooled([e[0, 0, i] for e in each]), 5)
    path.write_text("\n".join(lines) + "\n")
