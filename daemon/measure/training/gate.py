"""Fails when the engine reads the records of one held-out fold worse than it did, by more than a stated margin.

    python gate.py OUT              OUT as `engine.py` left it for `fold0/`
    python gate.py OUT --remember   write gate.json anew

The figures are those of the project's scorer, which lies beside the data.
"""
import argparse
import json
import sys
from pathlib import Path

import numpy as np

import records

REMEMBERED = Path(__file__).with_name("gate.json")
NAMES = {"ludb": "global_vs_global", "qtdb": "global_matched"}
# How much worse each figure may become: about one record of the fold for shares, 1 to 2 ms for spreads.
MARGINS = {"t_end_sd": 2.0, "t_end_robust_sd": 1.5, "qrs_on_sd": 1.5, "within30_pct": 6.0, "abs_of_median_error": 3.0}


def scored(base, out):
    """The scorer's results and pairs (record, true, read) per set, for the records that were measured."""
    sys.path.insert(0, str(base))
    import score

    plain = argparse.Namespace(peak_tol_ms=75.0, boundary_tol_ms=150.0, match_in_qrs=False, strict_onset=False)
    found = {}
    for kind in NAMES:
        marks, _ = score.read_predictions(str(out / f"{kind}.csv"))
        data = score.Dataset(str(base / kind), "auto", "q1c", None, False)
        data.names = [n for n in data.names if n in marks]
        found[kind] = score.score(data, marks, plain)
    return found


def figures(found):
    out = {}
    for kind, group in (("ludb", "global"), ("qtdb", "best_of_two")):
        result, pairs = found[kind]
        t, on = result["boundaries"][group]["t_end"], result["boundaries"][group]["qrs_on"]
        errors = np.array([read - true for _, true, read in pairs[NAMES[kind]]])
        out[kind] = dict(t_end_sd=t["sd"], t_end_robust_sd=t["robust_sd"], qrs_on_sd=on["sd"],
                         within30_pct=result["record_qt"][NAMES[kind]]["within30_pct"],
                         abs_of_median_error=round(abs(float(np.nanmedian(errors))), 1))
    return out


def main():
    now = figures(scored(records.folder(), Path(sys.argv[1])))
    print(json.dumps(now))
    if "--remember" in sys.argv:
        REMEMBERED.write_text(json.dumps(now, indent=1) + "\n")
        return
    worse = []
    for kind, before in json.loads(REMEMBERED.read_text()).items():
        for name, was in before.items():
            sign = -1 if name == "within30_pct" else 1
            if sign * (now[kind][name] - was) > MARGINS[name]:
                worse.append(f"{kind} {name}: {was} became {now[kind][name]}, more than {MARGINS[name]} worse")
    if worse:
        raise SystemExit("\n".join(worse))
    print(f"{sum(map(len, now.values()))} passed, 0 failed")


if __name__ == "__main__":
    main()
