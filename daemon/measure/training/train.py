"""Trains the learned reader and writes `src/learned/weights.txt` (with its card) and `parity.txt`.

    python train.py folds          cross-validate by record and keep each fold's answers
    python train.py scores         score the kept answers, for the card
    python train.py weights        train on every development record and keep the weights
    python train.py write          write the kept weights with their card, and the fixture
    python train.py write-folds    write each fold's weights and the names of its records, to score the whole
                                   engine on records that its nets were not trained on

All take the nets of RECIPE below, or some of them. One thread is enough: about a minute per net and fold.
"""
import argparse
import datetime
import json
import pickle
from functools import partial
from pathlib import Path

import jax
import jax.numpy as jnp
import numpy as np

import augment
import nets
import records
import tally
import weights
import windows

HERE = Path(__file__).resolve().parent
LEARNED = HERE.parent / "src" / "learned"
SCORES = HERE / "scores.json"
SEED = 20261

T_SIZE = dict(encoder=12, trunk=16, decoder=12, taps=9, dilations=(1, 2, 4, 6, 1), outputs=1)
QRS_SIZE = dict(encoder=12, trunk=14, decoder=8, taps=7, dilations=(1, 2, 4, 1), outputs=2)
T_TRAIN = dict(steps=1200, twelve=5, two=12, one=24, parts=(1.0, 0.7, 0.7))
QRS_TRAIN = dict(steps=900, twelve=8, two=16, one=0, parts=(1.0, 0.7, 0.7))
PLAIN = dict(stretch=0.40, t_gain=0.0, two_phases=0.2, u_wave=0.0, noise_uv=25.0)
RECIPE = {
    "t-end-1": dict(view="T", size=T_SIZE, train=T_TRAIN, how=PLAIN),
    "t-end-2": dict(view="T", size=T_SIZE, train=T_TRAIN, how=dict(PLAIN, stretch=0.45, noise_uv=40.0)),
    "qrs-1": dict(view="QRS", size=QRS_SIZE, train=QRS_TRAIN, how=dict(stretch=0.15, noise_uv=10.0, spike=0.1)),
    "qrs-2": dict(view="QRS", size=QRS_SIZE, train=QRS_TRAIN, how=dict(stretch=0.15, noise_uv=10.0, spike=0.25)),
}
VIEWS = {"T": (nets.T, [records.T_END], augment.t_window, nets.plain_t),
         "QRS": (nets.QRS, [records.ON, records.OFF], augment.qrs_window, nets.plain_qrs)}


def train(data, recipe, seed):
    """Weights of one net trained on `data`."""
    view, which, window, _ = VIEWS[recipe["view"]]
    how, plan, dilations = recipe["how"], recipe["train"], recipe["size"]["dilations"]
    batches = augment.Batches(data, view, which, np.random.default_rng(seed))
    key, sub = jax.random.split(jax.random.PRNGKey(seed))
    w = nets.init(sub, recipe["size"])

    def batch_loss(w, key, draws):
        total = 0.0
        for i, (tracks, mask, rr, both, each) in enumerate(draws):
            keys = jax.random.split(jax.random.fold_in(key, i), len(tracks))
            x, stretch, shift = jax.vmap(lambda k, a, m, r, b: window(k, a, r, m, b, how))(
                keys, tracks, mask, rr, both[:, 0])
            together, alone = nets.forward(w, x, mask, dilations)
            a, known = nets.loss(view, together, both * stretch[:, None] + shift[:, None])
            b, known_each = nets.loss(view, alone, each * stretch[:, None, None] + shift[:, None, None])
            m = mask[:, :, None]
            total += plan["parts"][i] * (a.sum() / jnp.maximum(known.sum(), 1)
                                         + 0.5 * (b * m).sum() / jnp.maximum((known_each * m).sum(), 1))
        return total

    @jax.jit
    def step(w, mean, square, i, key, draws):
        """Adam with a warm-up, a cosine and clipped gradients."""
        g = jax.grad(batch_loss)(w, key, draws)
        rate = 2.5e-3 * jnp.minimum(1, (i + 1) / 50) * (0.5 + 0.5 * jnp.cos(jnp.pi * i / plan["steps"]))
        norm = jnp.sqrt(sum(jnp.sum(x * x) for x in jax.tree.leaves(g)))
        g = jax.tree.map(lambda x: x * jnp.minimum(1, 5.0 / (norm + 1e-9)), g)
        mean = jax.tree.map(lambda a, b: 0.9 * a + 0.1 * b, mean, g)
        square = jax.tree.map(lambda a, b: 0.99 * a + 0.01 * b * b, square, g)
        move = lambda p, a, b: p * (1 - 0.01 * rate) - rate * (a / (1 - 0.9 ** (i + 1))) / (
            jnp.sqrt(b / (1 - 0.99 ** (i + 1))) + 1e-8)
        return jax.tree.map(move, w, mean, square), mean, square

    mean = square = jax.tree.map(jnp.zeros_like, w)
    for i in range(plan["steps"]):
        key, sub = jax.random.split(key)
        draws = batches.next(plan["twelve"], plan["two"], plan["one"])
        w, mean, square = step(w, mean, square, i, sub, draws)
    return weights.rounded(w)


@partial(jax.jit, static_argnums=(4, 5))
def _answers(w, tracks, rr, mask, view, dilations):
    view, _, _, plain = VIEWS[view]
    x = jax.vmap(plain)(tracks, rr, mask)
    return tuple(jax.nn.log_softmax(v, -1) for v in nets.forward(w, x, mask, dilations))


def read(w, recipe, record, leads=slice(None), block=16):
    """Log-probabilities for every beat: for all leads (beats, marks, points), for each (beats, leads, ...)."""
    view = VIEWS[recipe["view"]][0]
    tracks = (record.low if view is nets.T else record.wide)[:, leads]
    known = record.rr[np.isfinite(record.rr)]
    rr = np.where(np.isfinite(record.rr), record.rr, np.median(known) if len(known) else 1000.0)
    together, each = [], []
    for i in range(0, len(tracks), block):
        part = tracks[i:i + block]
        pad = block - len(part)
        a, b = _answers(w, np.pad(part, ((0, pad), (0, 0), (0, 0))),
                        np.pad(rr[i:i + block], (0, pad), constant_values=800.0).astype(np.float32),
                        np.ones((block, part.shape[1]), np.float32), recipe["view"], recipe["size"]["dilations"])
        together.append(np.asarray(a)[:block - pad])
        each.append(np.asarray(b)[:block - pad])
    return np.concatenate(together), np.concatenate(each)


def read_all(w, recipe, record):
    """As `src/learned/mod.rs` does: with at most three leads each lead is also read on its own."""
    together, each = read(w, recipe, record)
    leads = record.low.shape[1]
    if recipe["view"] == "T" and leads <= 3:
        each = np.stack([read(w, recipe, record, slice(i, i + 1))[0] for i in range(leads)], 1)
        together = 0.5 * together + 0.5 * each.mean(1)
    return together, each


def folds_of(data, split, count=5):
    rng, fold = np.random.default_rng(split), np.zeros(len(data), int)
    for kind in ("ludb", "qtdb"):
        own = [i for i, w in enumerate(data) if w.kind == kind]
        fold[rng.permutation(own)] = np.arange(len(own)) % count
    return fold


def cross_validate(data, names, split, keep):
    fold = folds_of(data, split)
    for name in names:
        answers = {}
        for k in range(fold.max() + 1):
            kept = keep / f"{name}-{split}-fold{k}.pickle"  # a run that was stopped goes on where it was
            if not kept.exists():
                w = train([d for d, f in zip(data, fold) if f != k], RECIPE[name], SEED + 100 * split + k)
                kept.write_bytes(pickle.dumps(w))
            w = pickle.loads(kept.read_bytes())
            for record, f in zip(data, fold):
                if f == k:
                    answers[record.key] = read_all(w, RECIPE[name], record)
            print(f"{name}: fold {k} of split {split} done", flush=True)
        (keep / f"{name}-{split}.pickle").write_bytes(pickle.dumps(answers))


def main():
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("what", choices=["folds", "scores", "weights", "write", "write-folds"])
    parser.add_argument("--nets", default=",".join(RECIPE), help="which nets of the recipe")
    parser.add_argument("--split", type=int, default=1, help="which random split of the records")
    parser.add_argument("--keep", type=Path, default=Path("/tmp/learned-folds"), help="where folds' answers are kept")
    given = parser.parse_args()
    given.keep.mkdir(parents=True, exist_ok=True)
    data, names = windows.everything(), given.nets.split(",")
    if given.what == "folds":
        cross_validate(data, names, given.split, given.keep)
    elif given.what == "scores":
        answers = {n: pickle.loads((given.keep / f"{n}-{given.split}.pickle").read_bytes()) for n in names}
        found = tally.scores(data, answers, folds_of(data, given.split))
        print(json.dumps(found, indent=1))
        SCORES.write_text(json.dumps(found, indent=1) + "\n")
    elif given.what == "weights":
        for name in names:
            trained = train(data, RECIPE[name], SEED)
            (given.keep / f"{name}.pickle").write_bytes(pickle.dumps(trained))
            print(f"{name}: trained", flush=True)
    elif given.what == "write-folds":
        fold = folds_of(data, given.split)
        for k in range(fold.max() + 1):
            trained = {n: pickle.loads((given.keep / f"{n}-{given.split}-fold{k}.pickle").read_bytes()) for n in names}
            weights.write(given.keep / f"fold{k}.txt", [f"Fold {k} of split {given.split}: for scoring only."], trained, RECIPE)
            held = [f"{d.kind}/{d.name}" for d, f in zip(data, fold) if f == k]
            (given.keep / f"fold{k}.records").write_text("\n".join(held) + "\n")
    else:
        trained = {name: pickle.loads((given.keep / f"{name}.pickle").read_bytes()) for name in names}
        card = weights.card(RECIPE, SEED, datetime.date.today(), json.loads(SCORES.read_text()))
        (LEARNED / "weights.md").write_text(card)
        about = ["The learned reader's nets; their card is weights.md. Made by training/train.py; do not edit."]
        weights.write(LEARNED / "weights.txt", about, trained, RECIPE)
        weights.fixture(LEARNED / "parity.txt", data, trained, RECIPE, VIEWS)


if __name__ == "__main__":
    main()
