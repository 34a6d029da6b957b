#!/usr/bin/env python3
"""Averaged periodogram and peaks of a WAV with SciPy, for bench_hour to time.

Needs NumPy and SciPy from PyPI (`pip install numpy scipy`).

    python3 scripts/welch_scipy.py FILE.wav SEGMENT

Prints the seconds from opening the file to the last peak, without the start of
the interpreter and the imports, and the number of peaks.
"""

import sys
import time

from scipy.io import wavfile
from scipy.signal import find_peaks, welch


def main():
    path, segment = sys.argv[1], int(sys.argv[2])
    began = time.perf_counter()
    rate, samples = wavfile.read(path)
    samples = samples.astype("float32") / 32768
    _, power = welch(samples, rate, window="hann", nperseg=segment, detrend=False)
    peaks, _ = find_peaks(power, prominence=power.mean())
    print(time.perf_counter() - began, len(peaks))


if __name__ == "__main__":
    main()
