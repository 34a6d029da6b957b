#!/usr/bin/env python3
"""Real sounds, decimated with no filter by two factors, reconciled.

Takes sounds of the Debian package sound-theme-freedesktop (install it, or unpack it
and name the folder), throws away all samples but every m-th and every n-th, has
`foldtrace reconcile` compare the two, and looks whether the strong tones' true
frequencies come back as they stand in the original.

    pip install numpy soundfile        # PyPI
    apt-get install sound-theme-freedesktop
    cargo build --release && python3 scripts/real_sounds.py [FOLDER] [PROGRAM]
"""

import csv
import io
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np
import soundfile

FOLDER = Path(sys.argv[1] if len(sys.argv) > 1 else "/usr/share/sounds/freedesktop/stereo")
PROGRAM = sys.argv[2] if len(sys.argv) > 2 else "target/release/foldtrace"
# A sound counts as a tone where this share of its power lies within three cells of
# its strongest line, and it lasts this long, s. Sounds that are the same are taken once.
SHARE, LEAST_S = 0.8, 0.4
# Decimation factors, by the rate of the sound: strong lines end up folded.
PAIRS = {8000: [(11, 13), (13, 17)], 22050: [(13, 17), (17, 23)]}
USUAL = [(23, 31), (41, 53)]


def strongest(x, rate):
    """Frequency of the strongest line, and the share of power about it."""
    x = x * np.hanning(len(x))
    power = np.abs(np.fft.rfft(x)) ** 2
    k = int(np.argmax(power))
    share = power[max(0, k - 3) : k + 4].sum() / power.sum()
    size = 1 << int(np.ceil(np.log2(16 * len(x))))
    fine = np.abs(np.fft.rfft(x, size))
    return int(np.argmax(fine)) * rate / size, share


def main():
    if not FOLDER.is_dir():
        sys.exit(f"{FOLDER}: not there; install the Debian package sound-theme-freedesktop")
    right = total = 0
    known = set()
    for path in sorted(FOLDER.glob("*.oga")):
        name = path.stem
        x, rate = soundfile.read(path, always_2d=True)
        x = x[:, 0]
        if len(x) < LEAST_S * rate:
            continue
        f, share = strongest(x, rate)
        if share < SHARE or (f, len(x)) in known:
            continue
        known.add((f, len(x)))
        for factors in PAIRS.get(rate, USUAL):
            with tempfile.TemporaryDirectory() as folder:
                files, rates = [], []
                for m in factors:
                    file = Path(folder) / f"{name}-{m}.wav"
                    soundfile.write(file, x[::m], round(rate / m), subtype="FLOAT")
                    files.append(str(file))
                    rates.append(repr(rate / m))
                # One converter made both: its clock is one clock.
                site = Path(folder) / "site.toml"
                site.write_text(f"[recorder]\nclock_ppm = 0.1\nbandwidth_hz = {rate / 2}\n")
                result = subprocess.run(
                    [PROGRAM, "reconcile", *files, "--rates", ",".join(rates),
                     "--site", str(site), "--suspects", "-"],
                    capture_output=True, text=True, check=True,
                )
            rows = list(csv.DictReader(io.StringIO(result.stdout)))
            total += 1
            # A short sound's line is a few cells wide.
            width = 2.0 * rate / len(x)
            hits = [r for r in rows if r["rank"] == "1" and " + " in r["recording"]
                    and r["true_hz"] and abs(float(r["true_hz"]) - f) < width]
            right += bool(hits)
            words = f"found at {hits[0]['true_hz']} Hz, zone {hits[0]['zone']}" if hits else "MISSED"
            print(f"{name:24} /{factors[0]} and /{factors[1]}: {f:9.2f} Hz {words}")
    print(f"{right} of {total} strong tones come back")


if __name__ == "__main__":
    main()
