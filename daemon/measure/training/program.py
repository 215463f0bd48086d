"""The crate's own program for these scripts (`examples/training.rs`)."""
import subprocess
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parents[3]
PROGRAM = ROOT / "target/debug/examples/training"  # the crate is optimised in every profile


def build():
    subprocess.run(["cargo", "build", "-q", "-p", "ebbmark-measure", "--example", "training", "--locked"],
                   cwd=ROOT, check=True)


def run(x, hz, *what):
    """What it says about x (samples, leads) in uV."""
    head = np.array([x.shape[1], len(x)], "<u4").tobytes() + np.array([hz], "<f4").tobytes()
    done = subprocess.run([PROGRAM, *what], input=head + np.ascontiguousarray(x.T, "<f4").tobytes(),
                          stdout=subprocess.PIPE, check=True)
    return done.stdout
