#!/usr/bin/env python3
"""Write tests/reference/lomb_scargle.csv: generalised Lomb-Scargle powers by astropy.

What: stamps, values, and the standard-normalised power of the generalised
periodogram (floating mean) at some frequencies far beyond half the mean rate, by
astropy's slow, direct method. The Rust tests compare against it; nothing here is used
when the program runs.

Rerun (from the root of the repository):
    python3 -m venv venv && venv/bin/pip install numpy astropy
    venv/bin/python scripts/lomb_scargle_values.py
Stored values were made with astropy 8.0.2 and the NumPy it installed. The output is
the same on every run.
"""

import csv
from pathlib import Path

import numpy as np
from astropy.timeseries import LombScargle

OUT = Path(__file__).resolve().parent.parent / "tests" / "reference" / "lomb_scargle.csv"

# A 100 Hz log with 5 % jitter; a tone at 237.4 Hz, an offset, and a weaker tone. No
# random generator, whose stream another version may change: a fixed recurrence.
state = 12345


def uniform():
    global state
    state = (1103515245 * state + 12345) % 2**31
    return state / 2**31


n = 300
times = np.array([round(0.01 * i + 0.0173 * (uniform() - 0.5), 7) for i in range(n)])
values = np.array(
    [
        round(2.5 + np.cos(2 * np.pi * 237.4 * t + 0.4) + 0.4 * np.sin(2 * np.pi * 12.9 * t) + (uniform() - 0.5), 7)
        for t in times
    ]
)
ladder = [37.4, 62.6, 137.4, 162.6, 237.4, 262.6, 337.4, 362.6, 0.2, 12.9, 237.5, 49.9]
power = LombScargle(times, values, fit_mean=True, center_data=True).power(
    ladder, method="slow", normalization="standard", assume_regular_frequency=False
)
with open(OUT, "w", newline="") as file:
    writer = csv.writer(file, lineterminator="\n")
    writer.writerow(["kind", "x", "y"])
    writer.writerows(["sample", repr(float(t)), repr(float(v))] for t, v in zip(times, values))
    writer.writerows(["power", repr(float(f)), repr(float(p))] for f, p in zip(ladder, power))
