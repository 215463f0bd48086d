"""Measures every development record with the whole engine and the nets of the fold that held it out, so that no record is
read by nets that saw it; writes what the project's scorer reads.

    python engine.py FOLDS OUT      FOLDS as `train.py write-folds` left it; writes OUT/ludb.csv, qtdb.csv, answers.csv
"""
import sys
from pathlib import Path

import program
import records

COLUMNS = "record,lead,beat_r_sample,qrs_on_sample,qrs_off_sample,t_end_sample"


def measured(base, kind, name, nets):
    """Rows of marks, and the answer. QTDB: the marked stretch with a minute on either side."""
    x, hz = records.signal(base, kind, name)
    first = 0
    if kind == "qtdb":
        r = records.experts(base, kind, name, hz)[0].r
        first = max(0, int(r.min() - 60 * hz))
        x = x[first:int(r.max() + 60 * hz)]
    answer, *rows = program.run(x, hz, "marks", nets).decode().splitlines()
    moved = []
    for row in rows:
        lead, *at = row.split(",")
        moved.append(",".join([name, lead] + [f"{float(v) + first:.2f}" if v else "" for v in at]))
    return moved, f"{kind},{name}," + answer.split(",", 1)[1]


def main():
    folds, out = Path(sys.argv[1]), Path(sys.argv[2])
    base = records.folder()
    program.build()
    out.mkdir(parents=True, exist_ok=True)
    rows, answers = {"ludb": [COLUMNS], "qtdb": [COLUMNS]}, ["kind,record,answer,qt_ms,doubt_ms,why"]
    for held in sorted(folds.glob("fold*.records")):
        for record in held.read_text().split():
            kind, name = record.split("/")
            marks, answer = measured(base, kind, name, held.with_suffix(".txt"))
            rows[kind] += marks
            answers.append(answer)
    for kind, lines in rows.items():
        (out / f"{kind}.csv").write_text("\n".join(lines) + "\n")
    (out / "answers.csv").write_text("\n".join(answers) + "\n")


if __name__ == "__main__":
    main()
