#!/usr/bin/env python3
"""Makes the small FLAC files under tests/reference/flac/ and the samples in
them, so that the tests compare with another decoder's source.

    python3 scripts/make_flac_fixtures.py

Needs NumPy and soundfile (which brings libFLAC) from PyPI. Prints what it
writes. Samples are primes and a slow sine, the same on every run; encoders
differ in bytes, not in samples.
"""

import pathlib

import numpy as np
import soundfile

FOLDER = pathlib.Path(__file__).resolve().parent.parent / "tests/reference/flac"
FRAMES = 5000


def samples(bits, channels):
    """Whole numbers that fill the range, one column per channel."""
    n = np.arange(FRAMES)
    full = 2 ** (bits - 1) - 1
    columns = [
        np.round(0.7 * full * np.sin(2 * np.pi * n * (c + 1) / 97.3)) + (n * 7919 + c) % 5 - 2
        for c in range(channels)
    ]
    return np.clip(np.stack(columns, 1), -full - 1, full).astype(np.int64)


def main():
    FOLDER.mkdir(parents=True, exist_ok=True)
    for name, bits, channels, subtype in [
        ("mono8", 8, 1, "PCM_S8"),
        ("mono16", 16, 1, "PCM_16"),
        ("stereo16", 16, 2, "PCM_16"),
        ("three24", 24, 3, "PCM_24"),
    ]:
        whole = samples(bits, channels)
        # soundfile takes 32-bit numbers whose upper bits are kept.
        shifted = (whole << (32 - bits)).astype(np.int32)
        path = FOLDER / f"{name}.flac"
        soundfile.write(path, shifted, 8000, subtype=subtype, format="FLAC")
        print(path.name, path.stat().st_size, "bytes")


if __name__ == "__main__":
    main()
