#!/usr/bin/env python3
"""Compares what ebbmark-formats reads with what general-purpose libraries read, sample by sample.

    crosscheck.py SAMPLES_BINARY SHARED_FOLDER

SAMPLES_BINARY is the `samples` example of ebbmark-formats. Real files come from SHARED_FOLDER and from the packages
pydicom and ecgprocess; nothing of them is kept. Tolerance: one unit in the last place of a 32-bit float, since ours
are 32-bit and theirs 64-bit.
"""
import glob
import os
import subprocess
import sys

import numpy as np


def ours(binary, path):
    run = subprocess.run([binary, path], capture_output=True, text=True, check=False)
    if run.returncode:
        raise AssertionError(f"{path}: {run.stderr.strip()}")
    head, _, body = run.stdout.partition("\n")
    rate, *leads = head.split(",")
    values = np.array([row.split(",") for row in body.splitlines()], dtype=np.float64)
    return float(rate), leads, values


def compare(name, rate, values, other_rate, other):
    assert abs(rate - other_rate) < 1e-9, f"{name}: rate {rate} against {other_rate}"
    assert values.shape == other.shape, f"{name}: shape {values.shape} against {other.shape}"
    assert (np.isnan(values) == np.isnan(other)).all(), f"{name}: missing samples differ"
    known = ~np.isnan(values)
    gap = np.abs(values[known] - other[known])
    allowed = np.spacing(np.abs(other[known]).astype(np.float32)).astype(np.float64) + 1e-9
    assert (gap <= allowed).all(), f"{name}: differs by up to {gap.max()} uV"
    return float(gap.max()) if gap.size else 0.0


def dicom(binary, paths):
    import pydicom
    from pydicom.waveforms import multiplex_array

    checked = 0
    for path in paths:
        data = pydicom.dcmread(path)
        groups = data.WaveformSequence
        index = max(
            (i for i, g in enumerate(groups) if g.get("WaveformOriginality", "ORIGINAL") != "DERIVED"),
            key=lambda i: groups[i].NumberOfWaveformSamples,
        )
        group = groups[index]
        other = multiplex_array(data, index, as_raw=False).astype(np.float64)
        raw = multiplex_array(data, index, as_raw=True)
        scale = {"uV": 1.0, "mV": 1e3, "V": 1e6}
        units = [c.ChannelSensitivityUnitsSequence[0].CodeValue for c in group.ChannelDefinitionSequence]
        other *= np.array([scale[u] for u in units])
        other[raw == np.iinfo(np.int16).min] = np.nan
        padding = int.from_bytes(group.get("WaveformPaddingValue") or b"\0\0", "little", signed=True)
        if padding:
            other[raw == padding] = np.nan
        rate, _, values = ours(binary, path)
        gap = compare(path, rate, values, float(group.SamplingFrequency), other)
        print(f"dicom {os.path.basename(path)}: {values.shape[0]} x {values.shape[1]}, largest difference {gap:.2g} uV")
        checked += 1
    return checked


def wfdb_records(binary, headers):
    import wfdb

    checked, worst = 0, 0.0
    for header in headers:
        record = wfdb.rdrecord(header[:-4])
        scale = {"mV": 1e3, "uV": 1.0, "V": 1e6}
        other = record.p_signal * np.array([scale[u] for u in record.units])
        rate, _, values = ours(binary, header)
        worst = max(worst, compare(header, rate, values, float(record.fs), other))
        checked += 1
    print(f"wfdb: {checked} records, largest difference {worst:.2g} uV")
    return checked


def main():
    binary, shared = sys.argv[1:3]
    import ecgprocess
    import pydicom

    beside = os.path.dirname(ecgprocess.__file__)
    paths = sorted(glob.glob(os.path.join(beside, "example_data", "**", "*.dcm"), recursive=True))
    paths += [os.path.join(os.path.dirname(pydicom.__file__), "data", "test_files", "waveform_ecg.dcm")]
    paths += [os.path.join(shared, "samples", "one-ecg-three-formats", "Example.dcm")]
    count = dicom(binary, [p for p in paths if os.path.exists(p)])
    assert count >= 2, "the DICOM samples are not there"
    headers = sorted(glob.glob(os.path.join(shared, "open-ecg", "ludb", "*.hea")))
    headers += sorted(glob.glob(os.path.join(shared, "open-ecg", "qtdb", "*.hea")))[:8]
    assert headers, "the WFDB records are not there"
    count += wfdb_records(binary, headers)
    print(f"{count} passed, 0 failed")


if __name__ == "__main__":
    main()
