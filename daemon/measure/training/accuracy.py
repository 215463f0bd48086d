"""Writes ACCURACY.md and its pictures: what the whole engine reads on the development records against the experts, every
record with the nets of the fold that held it out.

    python accuracy.py OUT          OUT as `engine.py` left it

The figures are those of the project's scorer, which lies beside the data.
"""
import csv
import sys
from pathlib import Path

import numpy as np

import program
import records
import windows
from gate import NAMES, scored

MEASURE = Path(__file__).resolve().parents[1]
PICTURES = MEASURE / "accuracy"


def theil_sen(pairs):
    x, y = np.array(pairs).T
    i, j = np.triu_indices(len(x), 1)
    apart = np.abs(x[j] - x[i]) > 1e-9
    return float(np.median((y[j] - y[i])[apart] / (x[j] - x[i])[apart]))


def records_of(found, answers):
    """One row per record with a reference: kind, name, true, error, answer, doubt, words."""
    rows = []
    for kind, (_, pairs) in found.items():
        for name, true, read in pairs[NAMES[kind]]:
            a = answers[kind, str(name)]
            rows.append(dict(kind=kind, name=str(name), true=float(true), error=float(read - true), answer=a["answer"],
                             doubt=float(a["doubt_ms"]), why=a["why"]))
    return rows


def share(values, limit):
    return 100 * float(np.mean(np.abs(values) <= limit)) if len(values) else float("nan")


def table(found, rows):
    l, q = (found[k][0] for k in ("ludb", "qtdb"))
    t, on = l["boundaries"]["global"]["t_end"], l["boundaries"]["global"]["qrs_on"]
    ii, g = l["record_qt"]["lead_vs_lead"], l["record_qt"]["global_vs_global"]
    t2, on2, one = (q["boundaries"]["best_of_two"]["t_end"], q["boundaries"]["best_of_two"]["qrs_on"],
                    q["record_qt"]["global_matched"])
    errors = lambda kind, keep: np.array([r["error"] for r in rows if r["kind"] == kind and keep(r) and np.isfinite(r["error"])])
    good = lambda r: r["answer"] == "good"
    given = lambda r: r["answer"] != "none"
    lines = [("LUDB T end over all leads, per beat: SD; robust SD; off by > 50 ms", "≤ 15; ≤ 9; ≤ 2 %",
              f"{t['sd']:.1f}; {t['robust_sd']:.1f}; {t['gross50_pct']:.1f} % (mean {t['mean']:.1f})"),
             ("LUDB QRS onset over all leads, per beat: SD; robust SD", "≤ 7; ≤ 5.5", f"{on['sd']:.1f}; {on['robust_sd']:.1f}"),
             ("LUDB QT of lead II: within 20 / 30", "≥ 90 / ≥ 95 %", f"{ii['within20_pct']:.0f} / {ii['within30_pct']:.0f} %"),
             ("LUDB QT over all leads: mean; within 20 / 30; off by > 50 among `good`", "± 5; ≥ 90 / ≥ 95 %; none",
              f"{g['mean']:.1f}; {g['within20_pct']:.0f} / {g['within30_pct']:.0f} %; {int(np.sum(abs(errors('ludb', good)) > 50))}"),
             ("LUDB answered", "≥ 97 %", f"{100 * np.mean([given(r) for r in rows if r['kind'] == 'ludb']):.0f} %"),
             ("QTDB T end, better of two leads, per beat: mean of records' SD; pooled; robust", "≤ 17; ≤ 28; ≤ 18",
              f"{t2['sd_within']:.1f}; {t2['sd']:.1f}; {t2['robust_sd']:.1f}"),
             ("QTDB QRS onset, better of two leads: mean of records' SD", "≤ 7", f"{on2['sd_within']:.1f}"),
             ("QTDB QT, one answer: within 30; off by > 50", "≥ 82 %; ≤ 8 %", f"{one['within30_pct']:.0f} %; {one['off50_pct']:.0f} %"),
             ("QTDB QT, one answer, `none` left out: within 30; refused", "≥ 85 %; ≤ 10 %",
              f"{share(errors('qtdb', given), 30):.0f} %; {100 * np.mean([not given(r) for r in rows if r['kind'] == 'qtdb']):.0f} %")]
    for kind in NAMES:
        pairs = [(r["true"], r["true"] + r["error"]) for r in rows if r["kind"] == kind and np.isfinite(r["error"])]
        long = errors(kind, lambda r: r["true"] >= 460)
        short = sum(r["error"] < -40 for r in rows if r["kind"] == kind and good(r) and r["true"] >= 460)
        lines.append((f"{kind.upper()} long QT (≥ 460, n = {len(long)}): mean; median of the absolute error; off by > 50; short by "
                      "> 40 among `good`", "± 8; ≤ 20; ≤ 10 %; none",
                      f"{long.mean():.1f}; {np.median(abs(long)):.1f}; {100 * np.mean(abs(long) > 50):.0f} %; {short}"))
        lines.append((f"{kind.upper()} slope of read on true QT (Theil–Sen)", "0.95–1.05", f"{theil_sen(pairs):.2f}"))
    return "\n".join(f"| {a} | {b} | {c} |" for a, b, c in lines)


def grades(rows):
    lines = []
    for kind in NAMES:
        for answer in ("good", "doubtful", "none"):
            own = [r for r in rows if r["kind"] == kind and r["answer"] == answer and np.isfinite(r["error"])]
            e, d = np.array([r["error"] for r in own]), np.array([r["doubt"] for r in own])
            if not len(e):
                continue
            inside = f"{100 * np.mean(abs(e) <= d):.0f} / {100 * np.mean(abs(e) <= 2 * d):.0f} %" if answer != "none" else "–"
            lines.append(f"| {kind.upper()} | {answer} | {len(e)} | {share(e, 20):.0f} / {share(e, 30):.0f} % | "
                         f"{int(np.sum(abs(e) > 50))} | {inside} |")
    return "\n".join(lines)


def svg(width, height, body):
    return (f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width} {height}" font-family="sans-serif" '
            f'font-size="11">\n<rect width="{width}" height="{height}" fill="#fff"/>\n{body}\n</svg>\n')


def calibration(rows):
    """Share of tracings whose true QT lies inside k times the stated doubt, beside that of a normal law."""
    from math import erf, sqrt

    ks = np.arange(0.25, 3.01, 0.25)
    own = [r for r in rows if r["answer"] != "none" and np.isfinite(r["error"])]
    at = lambda k, p: f"{40 + 110 * k:.0f},{230 - 200 * p:.0f}"
    body = ['<path d="M40 230H380M40 230V20" stroke="#000" fill="none"/>']
    for p in (0, 0.25, 0.5, 0.75, 1):
        body.append(f'<text x="34" y="{234 - 200 * p:.0f}" text-anchor="end">{100 * p:.0f} %</text>')
    for k in (1, 2, 3):
        body.append(f'<text x="{40 + 110 * k}" y="245" text-anchor="middle">{k} × doubt</text>')
    normal = " ".join(at(k, erf(k / sqrt(2))) for k in ks)
    body.append(f'<polyline points="{normal}" fill="none" stroke="#000" stroke-dasharray="2 3"/>')
    for kind, dash in (("ludb", ""), ("qtdb", "7 3")):
        set_ = [r for r in own if r["kind"] == kind]
        points = " ".join(at(k, np.mean([abs(r["error"]) <= k * r["doubt"] for r in set_])) for k in ks)
        body.append(f'<polyline points="{points}" fill="none" stroke="#000" stroke-width="1.6" stroke-dasharray="{dash}"/>')
    body.append('<text x="230" y="190">full LUDB, dashed QTDB, dotted normal</text>')
    return svg(400, 255, "\n".join(body))


def picture(base, row, beats):
    """The averaged leads of one marked beat; the experts' marks solid, the engine's dashed."""
    w = windows.one(base, row["kind"], row["name"])
    usable = np.flatnonzero(np.isfinite(w.both).all(1))
    i = usable[len(usable) // 2]
    nearest = min(beats, key=lambda b: abs(b[0] - w.r[i]))
    read = [(v - w.r[i]) / w.hz * 1000 for v in nearest[1:]]
    x_at = lambda ms: 10 + (ms + 300) * 0.45
    last = min(1100, w.rr[i] + 60 if np.isfinite(w.rr[i]) else 1100)
    names = [n.upper() for n in records.LEADS] if row["kind"] == "ludb" else ["0", "1"]
    body, step = [], 34 if row["kind"] == "ludb" else 120
    for j, lead in enumerate(w.low[i]):
        t = -300 + 4 * np.arange(len(lead))
        keep = t < last
        size = max(float(np.abs(lead[keep]).max()), 50.0)
        y0 = 26 + step * (j + 0.6)
        points = " ".join(f"{x_at(a):.1f},{y0 - 0.75 * step * b / size:.1f}" for a, b in zip(t[keep], lead[keep]))
        body.append(f'<polyline points="{points}" fill="none" stroke="#000" stroke-width="0.8"/>')
        body.append(f'<text x="2" y="{y0:.0f}" font-size="9">{names[j]}</text>')
    height = 40 + step * len(w.low[i])
    for ms, dash in [(w.both[i, k], "") for k in (0, 2)] + [(v, "4 3") for v in (read[0], read[2])]:
        if np.isfinite(ms):
            body.append(f'<path d="M{x_at(ms):.1f} 18V{height - 8}" stroke="#000" stroke-dasharray="{dash}"/>')
    title = f"{row['kind'].upper()} {row['name']}: true {row['true']:.0f}, read {row['error']:+.0f} ms, {row['answer']}"
    body.append(f'<text x="10" y="12">{title}</text>')
    return svg(650, height, "\n".join(body))


def global_beats(out, kind, name):
    number = lambda v: float(v) if v else float("nan")
    with open(out / f"{kind}.csv", newline="") as f:
        return [[number(r[c]) for c in ("beat_r_sample", "qrs_on_sample", "qrs_off_sample", "t_end_sample")]
                for r in csv.DictReader(f) if r["record"] == name and r["lead"] == "global"]


def main():
    base, out = records.folder(), Path(sys.argv[1])
    program.build()
    with open(out / "answers.csv", newline="") as f:
        answers = {(r["kind"], r["record"]): r for r in csv.DictReader(f)}
    found = scored(base, out)
    rows = records_of(found, answers)
    PICTURES.mkdir(exist_ok=True)
    (PICTURES / "calibration.svg").write_text(calibration(rows))
    worst = sorted((r for r in rows if np.isfinite(r["error"])), key=lambda r: -abs(r["error"]))[:10]
    listed = []
    for row in worst:
        name = f"{row['kind']}-{row['name']}.svg"
        (PICTURES / name).write_text(picture(base, row, global_beats(out, row["kind"], row["name"])))
        listed.append(f"| [{row['kind'].upper()} {row['name']}](accuracy/{name}) | {row['true']:.0f} | {row['error']:+.0f} | "
                      f"{row['answer']} | {row['why'] or '–'} |")
    text = (Path(__file__).with_name("accuracy.md.in")).read_text()
    for key, value in dict(TABLE=table(found, rows), GRADES=grades(rows), WORST="\n".join(listed)).items():
        text = text.replace(f"@{key}@", value)
    (MEASURE / "ACCURACY.md").write_text(text)


if __name__ == "__main__":
    main()
