#!/usr/bin/env python3
"""Times the project's fit of a damped sinusoid against scipy.optimize.curve_fit: the same record, the same start values (each some
per cent off), turn by turn, and prints the median ratio of times. Fails below the targets, or where the two don't end in the same
minimum, told by the distance in standard uncertainties. Started by scripts/speed.sh."""

import math
import statistics
import subprocess
import sys
import time

import numpy as np
from scipy.optimize import curve_fit

PAIRS = 11
# Fits of ours in each turn: short, as a turn of SciPy's is, so that both are disturbed alike; their median counts.
REPEATS = 25
PERIODS, QUALITY, NOISE = 12.0, 15.0, 0.02
# Least ratio of times by number of samples and instructions.
TARGETS = {(1_000, "detected"): 100, (10_000, "detected"): 300, (1_000, "baseline"): 50, (10_000, "baseline"): 50}
# Farthest that the two minima may be apart, in standard uncertainties, and SciPy's sum of squares below ours, relatively.
APART = 0.01
OFF = [1.05, 0.93, 1.008, 1.2, 0.9, 1.1]


def ring(x, amplitude, decay, angle, phase, offset, slope):
    return amplitude * np.exp(-decay * x) * np.cos(angle * x + phase) + offset + slope * x


def jacobian(x, amplitude, decay, angle, phase, offset, slope):
    envelope = np.exp(-decay * x)
    cosine, sine = envelope * np.cos(angle * x + phase), envelope * np.sin(angle * x + phase)
    columns = [cosine, -amplitude * x * cosine, -amplitude * x * sine, -amplitude * sine, np.ones_like(x), x]
    return np.column_stack(columns)


def record(count):
    angle = math.tau * PERIODS
    truth = [1.0, angle / (2 * QUALITY), angle, 0.3, 0.2, 0.1]
    x = np.arange(count) / count
    y = ring(x, *truth) + NOISE * np.random.default_rng(count).standard_normal(count)
    return x, y, [value * off for value, off in zip(truth, OFF)]


def scipy_fit(x, y, start, jac):
    begun = time.perf_counter()
    found, covariance = curve_fit(ring, x, y, p0=start, jac=jac)
    return time.perf_counter() - begun, found, covariance


class Ours:
    """The bench program, asked line by line."""

    def __init__(self):
        command = ["cargo", "bench", "--quiet", "-p", "ringstep-analysis", "--bench", "fit_speed"]
        self.program = subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)

    def fit(self, instructions, y, start):
        numbers = " ".join(repr(float(v)) for v in [start[1], start[2], *y])
        print(instructions, REPEATS, numbers, file=self.program.stdin, flush=True)
        seconds, decay, angle, cosine, sine, offset, slope = map(float, self.program.stdout.readline().split())
        phase = math.atan2(-sine, cosine)
        return seconds, np.array([math.hypot(cosine, sine), decay, angle, phase, offset, slope])


def compare(ours, count, instructions, jac):
    x, y, start = record(count)
    scipy_fit(x, y, start, jac)
    times = []
    for _ in range(PAIRS):
        theirs_s, theirs, covariance = scipy_fit(x, y, start, jac)
        ours_s, found = ours.fit(instructions, y, start)
        times.append((theirs_s, ours_s))
    apart = float(np.max(np.abs(found - theirs) / np.sqrt(np.diag(covariance))))
    theirs_s, ours_s = (statistics.median(column) for column in zip(*times))
    return theirs_s, ours_s, statistics.median(t / o for t, o in times), apart


def main():
    ours, failed = Ours(), False
    print(f"{'samples':>8} {'instructions':>12} {'Jacobian':>9} {'curve_fit':>11} {'ours':>10} {'ratio':>7} {'target':>7} apart")
    for (count, instructions), target in TARGETS.items():
        for name, jac in [("none", None), ("analytic", jacobian)]:
            theirs_s, ours_s, ratio, apart = compare(ours, count, instructions, jac)
            bad = ratio < target or not apart < APART
            failed |= bad
            row = f"{count:8} {instructions:>12} {name:>9} {theirs_s * 1e6:8.1f} us {ours_s * 1e6:7.2f} us {ratio:7.1f} {target:7}"
            print(f"{row} {apart:.1e}{'  falls short' if bad else ''}", flush=True)
    ours.program.stdin.close()
    ours.program.wait()
    return int(failed)


sys.exit(main())
