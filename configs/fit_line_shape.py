"""Fit an invented line shape: cedar decays into alder and birch.

    loopint interpolate configs/interpolate.toml
    python configs/fit_line_shape.py                (needs iminuit)

The amplitude is 1/(M^2 - s - g^2 [B(s) - Re B(M^2)]/(16 pi^2)) with the finite part B of the
alder-birch bubble, so that M is where the real part of the denominator vanishes.  Events are drawn
with M = 2.6 and g = 6 from the line shape and fitted with the gradient of the interpolant.
"""

from __future__ import annotations

import sys

import numpy as np
from iminuit import Minuit

import loopint

TRUE_MASS, TRUE_COUPLING, EVENTS, BINS = 2.6, 6.0, 40_000, 80
LOW, HIGH = 3.7, 16.0


def amplitude(loop, s, mass, coupling):
    """Return the amplitude and its derivatives by mass and coupling."""
    scale = coupling**2 / (16 * np.pi**2)
    subtracted = loop(0, s) - loop(0, mass**2).real
    denominator = mass**2 - s - scale * subtracted
    by_mass = 2 * mass + scale * 2 * mass * loop.gradient(0, mass**2).real
    by_coupling = -2 * coupling / (16 * np.pi**2) * subtracted
    value = 1 / denominator
    return value, -by_mass * value**2, -by_coupling * value**2


def line_shape(loop, s, mass, coupling):
    """Return |amplitude|^2 Im B, normalised over the bins, and its two derivatives."""
    value, by_mass, by_coupling = amplitude(loop, s, mass, coupling)
    phase_space = loop(0, s).imag
    shape = np.abs(value) ** 2 * phase_space
    slopes = [2 * (value.conj() * d).real * phase_space for d in (by_mass, by_coupling)]
    total = shape.sum()
    return shape / total, [(d - shape * d.sum() / total) / total for d in slopes]


def fit(path="runs/interpolate/alder_birch_loop.json", seed=20):
    """Draw the events and fit them; return the finished fit."""
    loop = loopint.load_interpolant(path)
    edges = np.linspace(LOW, HIGH, BINS + 1)
    s = (edges[1:] + edges[:-1]) / 2
    expected, _ = line_shape(loop, s, TRUE_MASS, TRUE_COUPLING)
    counts = np.random.default_rng(seed).poisson(EVENTS * expected)

    def cost(mass, coupling):
        shape, _ = line_shape(loop, s, mass, coupling)
        return -2 * np.sum(counts * np.log(shape))

    def slope(mass, coupling):
        shape, slopes = line_shape(loop, s, mass, coupling)
        return [-2 * np.sum(counts / shape * d) for d in slopes]

    found = Minuit(cost, mass=2.5, coupling=5.0, grad=slope)
    found.errordef = Minuit.LEAST_SQUARES
    found.limits = [(2.0, 3.5), (1.0, 12.0)]
    found.migrad()
    found.hesse()
    return found


if __name__ == "__main__":
    result = fit(*sys.argv[1:])
    for name, true in (("mass", TRUE_MASS), ("coupling", TRUE_COUPLING)):
        value, error = result.values[name], result.errors[name]
        print(f"{name:<9}{value:.4f} +/- {error:.4f}   true {true}")
    print(f"converged: {result.valid}, {result.nfcn} calls, {result.ngrad} gradients")
