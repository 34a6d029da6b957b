#!/usr/bin/env python3
"""Write the reference values in tests/reference/ from an independent implementation.

What: magnitudes of analog low-pass filters, samples and figures of spectral
windows, and Welch power spectra of two fixed test signals, all by SciPy. The Rust
tests compare against these files; nothing here is used when the program runs.

Rerun (from the root of the repository):
    python3 -m venv venv && venv/bin/pip install numpy scipy
    venv/bin/python scripts/reference_values.py
Stored values were made with NumPy 2.4.6 and SciPy 1.17.1. The output is the same
on every run; another version may differ in the last digits.
"""

import csv
from pathlib import Path

import numpy as np
from scipy import signal

OUT = Path(__file__).resolve().parent.parent / "tests" / "reference"


def write(name, header, rows):
    with open(OUT / name, "w", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(header)
        writer.writerows(rows)


def magnitude_db(zpk, corner_hz, f_hz):
    """|H| of an analog prototype with its corner at 1 rad/s, factor by factor."""
    zeros, poles, gain = zpk
    s = 1j * f_hz / corner_hz
    total = 20 * np.log10(abs(gain))
    total += sum(20 * np.log10(abs(s - z)) for z in zeros)
    total -= sum(20 * np.log10(abs(s - p)) for p in poles)
    return total


def filters():
    """Corner semantics: -3 dB for Butterworth and Bessel (norm='mag'), end of the
    ripple for Chebyshev I and elliptic, start of the stop band for Chebyshev II."""
    corner = 2267.6
    designs = []
    for n in (1, 2, 3, 4, 7, 8, 12, 20):
        designs.append(("butterworth", n, "", "", signal.butter(n, 1, analog=True, output="zpk")))
        designs.append(("bessel", n, "", "", signal.bessel(n, 1, analog=True, output="zpk", norm="mag")))
    for n in (1, 2, 3, 5, 8, 12):
        for ripple in (0.01, 0.5, 3.0):
            designs.append(("chebyshev1", n, ripple, "", signal.cheby1(n, ripple, 1, analog=True, output="zpk")))
        for stop in (20.0, 60.0, 96.0):
            designs.append(("chebyshev2", n, "", stop, signal.cheby2(n, stop, 1, analog=True, output="zpk")))
    for n in (1, 2, 3, 4, 5, 8, 11):
        for ripple, stop in ((0.1, 40.0), (0.5, 60.0), (0.01, 96.0), (3.0, 20.0)):
            designs.append(("elliptic", n, ripple, stop, signal.ellip(n, ripple, stop, 1, analog=True, output="zpk")))
    # No round multiples of the corner above it: there a zero of the filter can lie.
    ratios = (0.0, 0.05, 0.31, 0.72, 0.95, 1.0, 1.013, 1.21, 1.77, 3.19, 10.3, 97.0)
    rows = []
    for family, n, ripple, stop, zpk in designs:
        for ratio in ratios:
            f = ratio * corner
            rows.append((family, n, ripple, stop, corner, repr(f), repr(float(magnitude_db(zpk, corner, f)))))
    write("filters.csv", ("family", "order", "ripple_db", "stop_db", "corner_hz", "f_hz", "magnitude_db"), rows)


WINDOWS = {"rectangular": "boxcar", "hann": "hann", "hamming": "hamming",
           "blackman-harris": "blackmanharris", "nuttall": "nuttall"}


def windows():
    """Periodic (DFT-even) samples, and figures from a zero-padded transform.

    The response at an offset of d bins is |sum w exp(-2 pi i d n / N)| / sum w."""
    rows, figures, response = [], [], []
    for name, scipy_name in WINDOWS.items():
        w16 = signal.get_window(scipy_name, 16, fftbins=True)
        rows += [(name, 16, i, repr(float(v))) for i, v in enumerate(w16)]
        n, pad = 1024, 64
        w = signal.get_window(scipy_name, n, fftbins=True)
        figures.append((name, n, repr(float(n * np.sum(w**2) / np.sum(w) ** 2)), repr(float(np.mean(w)))))
        for offset in (0.0, 0.1, 0.5, 0.9, 1.5, 2.3, 3.6, 5.25, 17.4, 200.6):
            at = abs(np.sum(w * np.exp(-2j * np.pi * offset * np.arange(n) / n))) / np.sum(w)
            response.append((name, n, offset, repr(float(at))))
    write("windows.csv", ("window", "length", "index", "value"), rows)
    write("window_figures.csv", ("window", "length", "enbw_bins", "coherent_gain"), figures)
    write("window_response.csv", ("window", "length", "offset_bins", "magnitude"), response)


def lcg(count):
    """x -> (1103515245 x + 12345) mod 2^31 from 1; sample = (x >> 16) - 16384."""
    x, out = 1, []
    for _ in range(count):
        x = (1103515245 * x + 12345) % 2**31
        out.append((x >> 16) - 16384)
    return np.array(out, dtype=float)


def welch():
    """One-sided power spectra: 2048 samples at 8000/s, Hann segments of 256, half
    overlapped, nothing subtracted. `noise` is the integers of lcg(); `tone` adds a
    square wave to lcg() // 256 so that it has lines: + 8192 while (i // 9) is even,
    - 8192 otherwise. Every sample is a whole number that can be made again exactly.
    density is in units^2/Hz, power ("spectrum" scaling) in units^2 per bin."""
    rate, count, segment = 8000.0, 2048, 256
    noise = lcg(count)
    tone = np.floor(noise / 256) + np.where((np.arange(count) // 9) % 2 == 0, 8192, -8192)
    rows = []
    for name, x in (("noise", noise), ("tone", tone)):
        spectra = [signal.welch(x, fs=rate, window="hann", nperseg=segment, noverlap=segment // 2,
                                detrend=False, scaling=scaling) for scaling in ("density", "spectrum")]
        for f, density, power in zip(spectra[0][0], spectra[0][1], spectra[1][1]):
            rows.append((name, repr(float(f)), repr(float(density)), repr(float(power))))
    write("welch.csv", ("signal", "f_hz", "density", "power"), rows)


def sine_window():
    """What a windowed sine of amplitude 1 shows in a one-sided power spectrum: power
    in the highest bin and the sum over all bins divided by the noise bandwidth. The
    sine lies `offset` bins above bin 40 of 512, phase 0.7; a perfect estimate of its
    power is 0.5."""
    n = 512
    rows = []
    for name, scipy_name in WINDOWS.items():
        w = signal.get_window(scipy_name, n, fftbins=True)
        enbw = n * np.sum(w**2) / np.sum(w) ** 2
        for offset in (0.0, 0.25, 0.5):
            x = np.sin(2 * np.pi * (40 + offset) * np.arange(n) / n + 0.7)
            p = 2 * abs(np.fft.rfft(x * w)) ** 2 / np.sum(w) ** 2
            p[0] /= 2
            p[-1] /= 2
            rows.append((name, n, offset, repr(float(p.max())), repr(float(p.sum() / enbw))))
    write("sine_window.csv", ("window", "length", "offset_bins", "peak_power", "summed_power"), rows)


if __name__ == "__main__":
    OUT.mkdir(parents=True, exist_ok=True)
    filters()
    windows()
    welch()
    sine_window()
