#!/usr/bin/env python3
"""Fits rings on a straight and on a bent base with SciPy's Levenberg-Marquardt (scipy.optimize.curve_fit, tolerances at their limit,
analytic Jacobian) and prints samples, start, parameters, covariance and residual sum of squares. src/analysis/tests/fit.rs holds this
project's fit against them; its stored copy is `scripts/check_fits.py > src/analysis/tests/fits_library.json`.

The model is exp(-decay x) (cosine cos(angle x) + sine sin(angle x)) + offset + slope x [+ curvature x^2], x = n/N."""

import json
import math

import numpy as np
from scipy.optimize import curve_fit

# Name, samples, periods, quality, noise over amplitude, offset over amplitude, curvature (none: straight).
CASES = [
    ("few periods", 241, 3.2, 8.0, 0.05, 1.1, None),
    ("many periods, all points used", 300, 14.3, 40.0, 0.02, -0.4, None),
    ("many points a period", 700, 6.4, 15.0, 0.01, 1.2, None),
    ("bent base", 420, 7.7, 12.0, 0.02, 0.3, 0.5),
    ("noisy", 360, 9.5, 20.0, 0.2, 0.0, None),
]


def ring(x, decay, angle, cosine, sine, offset, slope, curvature=0.0):
    return np.exp(-decay * x) * (cosine * np.cos(angle * x) + sine * np.sin(angle * x)) + offset + slope * x + curvature * x**2


def jacobian(x, decay, angle, cosine, sine, *base):
    c, s = np.exp(-decay * x) * np.cos(angle * x), np.exp(-decay * x) * np.sin(angle * x)
    columns = [-x * (cosine * c + sine * s), x * (sine * c - cosine * s), c, s]
    return np.column_stack(columns + [x**k for k in range(len(base))])


def fitted(number, name, count, periods, quality, noise, offset, curvature):
    angle = math.tau * periods
    truth = [angle / (2 * quality), angle, 0.8, -0.6, offset, -0.2] + ([] if curvature is None else [curvature])
    x = np.arange(count) / count
    # Steps of a ten-thousandth, so that the stored text is short; the fit sees what is stored.
    volts = np.round(ring(x, *truth) + noise * np.random.default_rng(number).standard_normal(count), 4)
    start = [truth[0] * 1.1, truth[1] * (1 + 0.05 / periods)]
    found, covariance = curve_fit(
        ring, x, volts, p0=start + truth[2:], jac=jacobian, ftol=1e-15, xtol=1e-15, gtol=1e-15, maxfev=10_000
    )
    squares = float(np.sum((volts - ring(x, *found)) ** 2))
    return {
        "name": name,
        "volts": volts.tolist(),
        "start": start,
        "parameters": found.tolist(),
        "covariance": covariance.tolist(),
        "squares": squares,
    }


print("[\n" + ",\n".join(json.dumps(fitted(number, *case)) for number, case in enumerate(CASES)) + "\n]")
