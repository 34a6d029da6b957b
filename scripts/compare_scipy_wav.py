#!/usr/bin/env python3
"""Reads the WAV files that SciPy's wheel ships as its own test data with
SciPy and with foldtrace, and compares the samples.

    python3 scripts/compare_scipy_wav.py [WHEEL]

Needs NumPy and SciPy from PyPI, and Cargo. Without WHEEL, the wheel is fetched
by package name with pip. Prints a line per file; exits 1 if a file that both
read has other samples, or if one that SciPy reads is refused without a reason
that stands in EXPECTED below.
"""

import pathlib
import subprocess
import sys
import tempfile
import warnings
import zipfile

import numpy as np
from scipy.io import wavfile

ROOT = pathlib.Path(__file__).resolve().parent.parent
# Refused although SciPy reads it, or read although SciPy refuses it, and why.
EXPECTED = {}


def fetch(folder):
    command = [sys.executable, "-m", "pip", "download", "--no-deps", "--quiet", "-d", folder, "scipy"]
    subprocess.run(command, check=True)
    return next(pathlib.Path(folder).glob("scipy-*.whl"))


def as_fractions(samples):
    """SciPy's samples as fractions of full scale, as foldtrace has them."""
    if samples.dtype.kind == "f":
        return samples.astype(np.float32)
    if samples.dtype == np.uint8:
        return ((samples.astype(np.float32) - 128) / 128).astype(np.float32)
    # SciPy moves odd sizes up to the next container, whose full scale counts.
    scale = np.float64(2.0 ** (8 * samples.dtype.itemsize - 1))
    return (samples.astype(np.float64) / scale).astype(np.float32)


def with_scipy(path):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            rate, samples = wavfile.read(path)
        except Exception as error:  # any refusal counts
            return None, str(error).splitlines()[0]
    samples = as_fractions(samples)
    return (rate, samples.reshape(len(samples), -1)), None


def with_foldtrace(path):
    program = ROOT / "target/debug/examples/dump_samples"
    done = subprocess.run([program, path], capture_output=True)
    if done.returncode != 0:
        return None, done.stderr.decode().strip()
    rate, channels = np.frombuffer(done.stdout[:16], "<f8")
    samples = np.frombuffer(done.stdout[16:], "<f4")
    return (rate, samples.reshape(-1, int(channels))), None


def main():
    subprocess.run(["cargo", "build", "--quiet", "--example", "dump_samples"], cwd=ROOT, check=True)
    bad = 0
    with tempfile.TemporaryDirectory() as folder:
        wheel = pathlib.Path(sys.argv[1]) if len(sys.argv) > 1 else fetch(folder)
        with zipfile.ZipFile(wheel) as archive:
            names = [n for n in archive.namelist() if "/io/tests/data/" in n and n.endswith(".wav")]
            archive.extractall(folder, names)
        same = refused = 0
        for name in sorted(names):
            path = pathlib.Path(folder) / name
            theirs, why_theirs = with_scipy(path)
            ours, why_ours = with_foldtrace(path)
            if theirs and ours:
                equal = theirs[0] == ours[0] and np.array_equal(theirs[1], ours[1], equal_nan=True)
                verdict = "identical" if equal else "DIFFERENT"
                same += equal
                bad += not equal
            elif theirs:
                reason = EXPECTED.get(path.name)
                verdict = f"refused ({reason or 'NO REASON GIVEN'}): {why_ours}"
                bad += reason is None
            elif ours:
                verdict = f"read, though SciPy refuses it: {why_theirs}"
            else:
                verdict = f"both refuse: {why_ours}"
                refused += 1
            print(f"{path.name}: {verdict}")
        print(f"{len(names)} files: {same} identical, {refused} refused by both, {bad} bad")
    sys.exit(1 if bad else 0)


if __name__ == "__main__":
    main()
