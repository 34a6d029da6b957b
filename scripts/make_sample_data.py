#!/usr/bin/env python3
"""Make the recordings in sample-data/ and the list of what is in them.

Usage: python3 scripts/make_sample_data.py [--out DIR]

Nothing here knows where a line folds to. Every source is an analog signal, a
sum of sines whose phase is the integral of its true frequency, and a recording
is that signal read at the instants t = n / (rate * (1 + clock error)). Where a
line is seen is then read off its own phase at those instants (`seen_hz`).

All three recorders run at once, so they hear the same wander. Standard library
only; the same bytes on every run (seeded).
"""

import argparse
import csv
import math
import random
import tomllib
import wave
from array import array
from dataclasses import dataclass
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
SEED = 20_417
TAU = 2.0 * math.pi

SCENE_S = 121.0  # a little more than the longest recording
KNOT_S = 0.5  # true frequencies are piecewise linear between knots

# Least tone power over noise power in one cell (1 / duration), dB, after the
# tone's wander has smeared it over several. Whatever would come out weaker is
# left out altogether: a tone is there or it is not.
MIN_SNR_DB = 20.0
# Least distance between two tones, in cells, and from 0 and rate / 2.
MIN_GAP_CELLS = 30.0


# --- the machines -----------------------------------------------------------


class Latent:
    """A frequency that wanders slowly, and the cycles run since t = 0."""

    def __init__(self, knots_hz):
        self.knots_hz = knots_hz
        self.cycles_at_knot = [0.0]
        for a, b in zip(knots_hz, knots_hz[1:]):
            self.cycles_at_knot.append(self.cycles_at_knot[-1] + 0.5 * (a + b) * KNOT_S)

    def cycles(self, t):
        """Integral of the frequency from 0 to t."""
        k = int(t / KNOT_S)
        u = t - k * KNOT_S
        f0, f1 = self.knots_hz[k], self.knots_hz[k + 1]
        return self.cycles_at_knot[k] + u * (f0 + (f1 - f0) * u / (2.0 * KNOT_S))


def wander(rng, mean, sd, settle_s=30.0):
    """Knots of a first-order random walk that is pulled back to `mean`."""
    keep = math.exp(-KNOT_S / settle_s)
    push = sd * math.sqrt(1.0 - keep * keep)
    x = rng.gauss(0.0, sd)
    knots = []
    for _ in range(int(SCENE_S / KNOT_S) + 2):
        knots.append(mean + x)
        x = keep * x + rng.gauss(0.0, push)
    return knots


def make_latents():
    """The truth: true frequencies in Hz. The site files hold only nominal ones."""
    rng = random.Random(SEED)
    mains = wander(rng, 49.983, 0.0015)
    slip = wander(rng, 0.0291, 2e-5)  # of the four-pole motor
    return {
        "mains": Latent(mains),
        "motor": Latent([f / 2.0 * (1.0 - s) for f, s in zip(mains, slip)]),
        "fan": Latent(wander(rng, 11.7203, 0.0015)),
        "carrier": Latent(wander(rng, 5021.37, 0.004)),
        "output": Latent(wander(rng, 43.817, 0.0005)),
        "charger": Latent(wander(rng, 27213.6, 0.012)),
        "ripple": Latent(wander(rng, 240.0036, 0.0)),  # quartz-timed
        "whistle": Latent(wander(rng, 1733.21, 0.008)),
    }


@dataclass
class Line:
    """One analog sine."""

    source: str  # name in the site files, or "unlisted"
    label: str  # "7x", "2c-1o", "1b+1f"; "" if unlisted
    terms: dict  # latent -> multiplier
    level_dbfs: float  # in the recording; 0 dBFS is a full-scale sine
    also: str = ""  # a line of another source at the very same frequency


def family(source, latent, levels):
    """Multiples of one latent, from {order: level}."""
    return [Line(source, f"{k}x", {latent: k}, level) for k, level in levels.items()]


def bessel_j(n, x):
    """Bessel function of the first kind by its power series."""
    return sum(
        (-1) ** k / (math.factorial(k) * math.factorial(k + n)) * (x / 2.0) ** (2 * k + n)
        for k in range(40)
    )


def signed(n, unit):
    return f"{n:+d}{unit}" if n else ""


def drive_lines(top_dbfs, depth=0.86, orders=4):
    """Inverter lines m*carrier + n*output, m + n odd, |n| <= 6.

    Amplitudes are those of naturally sampled sine-triangle modulation,
    J_n(m pi M / 2) / m (double Fourier series). Multiples of three, 0 among
    them, are common to the three phases and reach the cable only weakly:
    20 dB down. A further 6 dB per octave is lost on the way into the cable.
    """
    lines = []
    for m in range(1, orders + 1):
        for n in range(-6, 7):
            if (m + n) % 2 == 0:
                continue
            amplitude = abs(bessel_j(abs(n), m * math.pi * depth / 2.0)) / m / m
            if n % 3 == 0:
                amplitude *= 0.1
            level = top_dbfs + 20.0 * math.log10(amplitude + 1e-12)
            lines.append(
                Line(
                    "circulation drive",
                    f"{m}c{signed(n, 'o')}",
                    {"carrier": m, "output": n},
                    level,
                )
            )
    return lines


def motor_bars(level_dbfs):
    """Rotor bars passing, beside the supply: 28 * shaft +- mains."""
    return [
        Line("pump motor", f"1b{signed(f, 'f')}", {"motor": 28, "mains": f}, level_dbfs)
        for f in (-1, 1)
    ]


def skid_lines():
    """What the pick-up on the pump skid hears: machines and electronics."""
    mains = family(
        "supply mains",
        "mains",
        # 100 Hz hum of iron, then the steps of six-pulse rectifiers: 6k +- 1.
        {1: -50, 2: -43, 3: -57, 4: -55, 5: -56, 6: -53, 7: -60, 11: -65, 12: -63, 13: -67},
    )
    mains[1].also = "pump motor 2f"
    charger = [
        Line("battery charger", f"{m}x{signed(s, 's')}", {"charger": m, "ripple": s}, level)
        for m, s, level in (
            (1, 0, -53),
            (1, -1, -61),
            (1, 1, -62),
            (2, 0, -59),
            (2, -1, -66),
            (2, 1, -67),
        )
    ]
    return (
        mains
        + family("pump motor", "motor", {1: -44, 2: -50, 3: -58})
        + motor_bars(-58)
        + family("roof fan", "fan", {1: -48, 2: -56, 6: -52, 12: -60})
        + drive_lines(-34.0)
        + charger
        + [Line("unlisted", "", {"whistle": 1}, -66)]  # a valve that whistles
    )


def fan_lines():
    """What the logger on the fan's bearing block hears; no electronics."""
    mains = family("supply mains", "mains", {1: -51, 2: -44, 3: -58, 4: -53, 6: -53, 12: -54})
    mains[1].also = "pump motor 2f"
    return (
        mains
        + family("roof fan", "fan", {1: -32, 2: -41, 3: -49, 6: -36, 12: -42, 18: -45, 24: -47})
        + family("pump motor", "motor", {1: -48, 2: -54})
        + motor_bars(-48)
    )


# --- the recorders ----------------------------------------------------------


@dataclass
class Recording:
    name: str
    site: str
    rate_hz: int  # what the file says
    clock_ppm: float  # what the recorder's clock is really off by
    seconds: int
    noise_dbfs: float  # white part, rms, 0 dBFS = rms of a full-scale sine
    seed: int
    lines: list

    @property
    def samples(self):
        return self.rate_hz * self.seconds

    @property
    def cell_hz(self):
        return 1.0 / self.seconds

    def instants(self):
        """True time of each sample, s."""
        true_rate = self.rate_hz * (1.0 + self.clock_ppm * 1e-6)
        return [n / true_rate for n in range(self.samples)]


class Noise:
    """White noise plus a pinkish rise below some 100 Hz: one white sequence
    through 1 + sum of g / (1 - a z^-1), poles spread over the low decades."""

    CORNERS_HZ = (1.0, 6.0, 36.0)

    def __init__(self, recording):
        self.rate_hz = recording.rate_hz
        self.sigma = 10.0 ** (recording.noise_dbfs / 20.0) / math.sqrt(2.0)
        self.seed = recording.seed
        self.poles = []
        for corner in self.CORNERS_HZ:
            a = math.exp(-TAU * corner / self.rate_hz)
            # Level at 0 Hz against the white part: falls as 1/sqrt(corner), as pink does.
            self.poles.append((a, (1.0 - a) * 3.0 * math.sqrt(36.0 / corner)))

    def density(self, seen_hz):
        """One-sided power density, full scale squared per Hz."""
        z = complex(math.cos(TAU * seen_hz / self.rate_hz), -math.sin(TAU * seen_hz / self.rate_hz))
        h = 1.0 + sum(g / (1.0 - a * z) for a, g in self.poles)
        return 2.0 * self.sigma**2 * abs(h) ** 2 / self.rate_hz

    def samples(self, count):
        gauss = random.Random(self.seed).gauss
        (a0, g0), (a1, g1), (a2, g2) = self.poles
        y0 = y1 = y2 = 0.0
        out = []
        for _ in range(count):
            w = gauss(0.0, self.sigma)
            y0 = a0 * y0 + g0 * w
            y1 = a1 * y1 + g1 * w
            y2 = a2 * y2 + g2 * w
            out.append(w + y0 + y1 + y2)
        return out


def line_cycles(line, cycles):
    """Phase of a line at each sample, in cycles."""
    total = None
    for latent, times in line.terms.items():
        if not times:
            continue
        part = cycles[latent]
        if total is None:
            total = [times * c for c in part]
        else:
            total = [x + times * c for x, c in zip(total, part)]
    return total


def measure(phase, times, rate_hz):
    """What a recorder can know of a line: how far its phase moves from one
    sample to the next, whole turns being invisible."""
    steps = []
    for a, b in zip(phase, phase[1:]):
        step = b - a
        steps.append(step - round(step))
    mean = math.fsum(steps) / len(steps)
    # Averaged over half a second, so that rounding of the phase does not count.
    run = rate_hz // 2
    means = [sum(steps[i : i + run]) / run for i in range(0, len(steps) - run + 1, run)]
    spread = math.sqrt(math.fsum((m - mean) ** 2 for m in means) / len(means))
    true_hz = (phase[-1] - phase[0]) / (times[-1] - times[0])
    return {
        "seen_hz": abs(mean) * rate_hz,
        "true_hz": true_hz,
        "inverted": mean < 0.0,
        "wander_hz": spread * rate_hz,
    }


def record(recording, latents):
    """Samples as fractions of full scale, and the truth about the tones."""
    times = recording.instants()
    needed = {name for line in recording.lines for name in line.terms}
    cycles = {name: [latents[name].cycles(t) for t in times] for name in sorted(needed)}
    noise = Noise(recording)
    samples = noise.samples(recording.samples)
    phases = random.Random(recording.seed + 1)
    truth = []
    quietest = noise.density(recording.rate_hz / 2.0)
    for line in recording.lines:
        start = phases.random()
        amplitude = 10.0 ** (line.level_dbfs / 20.0)

        def snr_db(density):
            return 10.0 * math.log10(amplitude**2 / 2.0 / (density * recording.cell_hz))

        if snr_db(quietest) < MIN_SNR_DB:  # hopeless wherever it is seen
            continue
        phase = line_cycles(line, cycles)
        seen = measure(phase, times, recording.rate_hz)
        snr = snr_db(noise.density(seen["seen_hz"]))
        # Cells that hold most of the power: two standard deviations either way.
        smear_db = 10.0 * math.log10(1.0 + 4.0 * seen["wander_hz"] / recording.cell_hz)
        if snr - smear_db < MIN_SNR_DB:
            continue
        sin = math.sin
        samples = [x + amplitude * sin(TAU * (p + start)) for x, p in zip(samples, phase)]
        truth.append(
            {
                "recording": recording.name,
                "seen_hz": f"{seen['seen_hz']:.5f}",
                "true_hz": f"{seen['true_hz']:.5f}",
                "source": line.source,
                "line": line.label,
                "level_dbfs": f"{line.level_dbfs:.2f}",
                "folded": "yes" if seen["true_hz"] > recording.rate_hz / 2.0 else "no",
                "inverted": "yes" if seen["inverted"] else "no",
                "wander_hz": f"{seen['wander_hz']:.4f}",
                "snr_db": f"{snr:.1f}",
                "also": line.also,
            }
        )
    truth.sort(key=lambda row: float(row["seen_hz"]))
    return samples, truth


# --- checks of the scenario itself ------------------------------------------


def check_gaps(recording, truth):
    """Tones of one recording stand clear of one another and of the edges."""
    marks = [0.0] + [float(row["seen_hz"]) for row in truth] + [recording.rate_hz / 2.0]
    for low, high in zip(marks, marks[1:]):
        if (high - low) / recording.cell_hz < MIN_GAP_CELLS:
            raise SystemExit(f"{recording.name}: {low:.3f} and {high:.3f} Hz are too close")


def check_site(path, latents, truth):
    """The site file names the sources, and its tolerances hold the truth."""
    site = tomllib.loads(path.read_text(encoding="utf-8"))
    named = {source["name"]: source for source in site["source"]}
    for row in truth:
        if row["source"] not in named and row["source"] != "unlisted":
            raise SystemExit(f"{path.name}: no source named {row['source']}")
    for name, key, tolerance, latent in (
        ("supply mains", "hz", "tolerance", "mains"),
        ("roof fan", "rpm", "tolerance", "fan"),
        ("circulation drive", "carrier_hz", "carrier_tolerance", "carrier"),
        ("circulation drive", "output_hz", "output_tolerance", "output"),
        ("battery charger", "hz", "tolerance", "charger"),
    ):
        nominal = named[name][key] / (60.0 if key == "rpm" else 1.0)
        percent = float(named[name][tolerance].removesuffix(" %"))
        for true in latents[latent].knots_hz:
            if abs(true / nominal - 1.0) > percent / 100.0:
                raise SystemExit(f"{path.name}: {name}: {true:.4f} Hz is out of tolerance")


# --- files ------------------------------------------------------------------


def write_wav(path, rate_hz, samples):
    peak = max(abs(x) for x in samples)
    if peak >= 1.0:
        raise SystemExit(f"{path.name}: clips ({peak:.2f} of full scale)")
    words = array("h", (round(32767.0 * x) for x in samples))
    if array("h", [1]).tobytes() != b"\x01\x00":
        words.byteswap()
    with wave.open(str(path), "wb") as out:
        out.setnchannels(1)
        out.setsampwidth(2)
        out.setframerate(rate_hz)
        out.writeframes(words.tobytes())


def write_logger_csv(path, rate_hz, samples, full_scale=20.0):
    """Time as the logger believes it to be, value in m/s^2 with 4 decimals."""
    with path.open("w", encoding="utf-8", newline="") as out:
        out.write("time [s],acceleration [m/s^2]\n")
        for n, x in enumerate(samples):
            out.write(f"{n / rate_hz:.8f},{full_scale * x:.4f}\n")


def write_truth(path, rows):
    with path.open("w", encoding="utf-8", newline="") as out:
        table = csv.DictWriter(out, fieldnames=list(rows[0]), lineterminator="\n")
        table.writeheader()
        table.writerows(rows)


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--out", type=Path, default=ROOT / "sample-data")
    out = parser.parse_args().out
    (out / "recordings").mkdir(parents=True, exist_ok=True)
    latents = make_latents()
    recordings = [
        Recording("skid-8000.wav", "orrowmere.toml", 8000, 40.0, 75, -42.0, 11, skid_lines()),
        Recording("skid-11025.wav", "orrowmere.toml", 11025, -25.0, 60, -42.0, 12, skid_lines()),
        Recording("fan-logger.csv", "orrowmere-logger.toml", 256, 60.0, 120, -52.0, 13, fan_lines()),
    ]
    rows = []
    for recording in recordings:
        samples, truth = record(recording, latents)
        check_gaps(recording, truth)
        check_site(ROOT / "sample-data" / recording.site, latents, truth)
        path = out / "recordings" / recording.name
        if path.suffix == ".wav":
            write_wav(path, recording.rate_hz, samples)
        else:
            write_logger_csv(path, recording.rate_hz, samples)
        folded = sum(row["folded"] == "yes" for row in truth)
        print(f"{path}: {path.stat().st_size} bytes, {len(truth)} tones, {folded} folded")
        rows += truth
    write_truth(out / "truth.csv", rows)


if __name__ == "__main__":
    main()
