#!/usr/bin/env python3
"""Prints results of the worked examples of JCGM 100:2008, annex H, and of a ring's node capacitance, as the libraries
uncertainties and GTC find them from the same data: value, standard uncertainty and, from GTC, degrees of freedom.
src/analysis/tests/budget.rs holds this project's results against them; its stored copy is
`scripts/check_uncertainty.py > src/analysis/tests/uncertainty_libraries.json`."""

import json
import math

import GTC
import numpy as np
import uncertainties
from uncertainties import umath

# Data of H.2 and H.3 as the documentation of GTC 1.5.1 prints them.
VOLTS = [5.007, 4.994, 5.005, 4.990, 4.999]
AMPERES = [19.663e-3, 19.639e-3, 19.640e-3, 19.685e-3, 19.678e-3]
RADIANS = [1.0456, 1.0438, 1.0468, 1.0428, 1.0433]
DEGREES = [21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511]
CORRECTIONS = [-0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160]


def with_uncertainties(inputs):
    return [uncertainties.ufloat(value, u) for value, u, _ in inputs]


def with_gtc(inputs):
    return [GTC.ureal(value, u, freedom) for value, u, freedom in inputs]


def both(theirs, gtc):
    return {
        "uncertainties": [theirs.nominal_value, theirs.std_dev],
        "GTC": [GTC.value(gtc), GTC.uncertainty(gtc), None if math.isinf(gtc.df) else gtc.df],
    }


def end_gauge():
    """H.1, in nm and degrees."""
    within = lambda half_width: half_width / math.sqrt(3)
    inputs = [(50_000_623, 25, 18), (215, 5.8, 24), (0, 3.9, 5), (0, 6.7, 8), (11.5e-6, within(2e-6), math.inf)]
    inputs += [(-0.1, 0.41, math.inf), (0, within(1e-6), 50), (0, within(0.05), 2)]
    length = lambda s, d, random, systematic, alpha, theta, d_alpha, d_theta: (
        s + d + random + systematic - s * (d_alpha * theta + alpha * d_theta)
    )
    return {"end gauge": both(length(*with_uncertainties(inputs)), length(*with_gtc(inputs)))}


def impedance():
    """H.2: means of quantities observed together."""
    observed = [VOLTS, AMPERES, RADIANS]
    covariance = np.cov(observed) / len(VOLTS)
    v, i, phi = uncertainties.correlated_values([np.mean(x) for x in observed], covariance)
    gv, gi, gphi = GTC.type_a.multi_estimate_real(observed)
    return {
        "resistance": both(v / i * umath.cos(phi), gv / gi * GTC.cos(gphi)),
        "reactance": both(v / i * umath.sin(phi), gv / gi * GTC.sin(gphi)),
        "impedance": both(v / i, gv / gi),
    }


def calibration_line():
    """H.3: the correction at 30 degrees from a line fitted about 20 degrees."""
    away = [t - 20 for t in DEGREES]
    (slope, offset), covariance = np.polyfit(away, CORRECTIONS, 1, cov=True)
    slope, offset = uncertainties.correlated_values([slope, offset], covariance)
    fit = GTC.type_a.line_fit(away, CORRECTIONS)
    return {"correction at 30 degrees": both(offset + 10 * slope, fit.intercept + 10 * fit.slope)}


def node_capacitance():
    """C = 1/(w0^2 L) less the probe: frequency from a fit, time base, nominal inductance, probe."""
    inputs = [(531.2e3, 41.0, 7), (1.0, 25e-6 / math.sqrt(3), math.inf), (1.1e-3, 0.055e-3 / math.sqrt(3), 12)]
    inputs += [(10e-12, 0.6e-12, math.inf)]
    law = lambda f, time_base, henry, probe: 1 / ((2 * math.pi * f * time_base) ** 2 * henry) - probe
    return {"node capacitance": both(law(*with_uncertainties(inputs)), law(*with_gtc(inputs)))}


print(json.dumps({**end_gauge(), **impedance(), **calibration_line(), **node_capacitance()}, indent=1))
