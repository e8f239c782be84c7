#!/usr/bin/env python3
"""Levels N(P) of sums of symbols and noise by direct convolution, as JSON.

Every amplitude is a whole number of grid steps, so the lattice of the sum is convolved without
splitting anything; the Gaussian is then added in closed form. Nothing is left but rounding.
"""
import json

import numpy as np
from scipy.optimize import brentq
from scipy.special import log_ndtr, logsumexp

STEP_V = 1e-4 / 3


def level_of(symbols, binary, levels, sigma_v, probability):
    """symbols, binary: whole grid steps; symbols are multiples of levels - 1."""
    mass = np.ones(1)
    for amplitude, count in [(a, levels) for a in symbols] + [(b, 2) for b in binary]:
        positions = amplitude * (2 * np.arange(count) - (count - 1)) // (count - 1)
        kernel = np.zeros(2 * abs(amplitude) + 1)
        np.add.at(kernel, positions + abs(amplitude), 1.0 / count)
        mass = np.convolve(mass, kernel)
    x_v = (np.arange(len(mass)) - (len(mass) - 1) // 2) * STEP_V
    keep = mass > 0
    log_mass, x_v = np.log(mass[keep]), x_v[keep]

    def excess(level_v):
        return logsumexp(log_mass + log_ndtr((x_v - level_v) / sigma_v)) - np.log(probability)

    top = x_v[-1] + 40 * sigma_v
    return brentq(excess, 0.0, top, xtol=1e-12, rtol=1e-14)


def cases():
    rng = np.random.default_rng(6)
    decaying = np.round(900 * rng.uniform(-1, 1, 200) * np.exp(-np.arange(200) / 15)).astype(int)
    flat = rng.integers(-60, 61, 200)
    equal = np.full(40, 150)
    jitter = rng.integers(-20, 21, 60)
    for probability in (1e-3, 1e-6, 1e-12, 1e-15, 1e-18):
        yield "decaying", decaying, [], 2, 1e-3, probability
        yield "decaying, little noise", decaying, [], 2, 2e-4, probability
        yield "flat", flat, [], 2, 1e-3, probability
        yield "40 equal, 0.1 mV noise", equal, [], 2, 1e-4, probability
        yield "40 equal, 0.5 mV noise", equal, [], 2, 5e-4, probability
        yield "one", np.array([600]), [], 2, 1e-3, probability
        yield "with dual-Dirac jitter", decaying, jitter, 2, 1e-3, probability
        yield "four levels", 3 * (decaying // 3), jitter, 4, 1e-3, probability
        yield "four levels, 40 equal", equal, [], 4, 3e-4, probability


def main():
    out = []
    for name, symbols, binary, levels, sigma_v, probability in cases():
        symbols, binary = [int(s) for s in symbols], [int(b) for b in binary]
        out.append({
            "name": name, "levels": levels, "sigma_v": sigma_v, "probability": probability,
            "symbols_v": [s * STEP_V for s in symbols], "binary_v": [b * STEP_V for b in binary],
            "level_v": level_of(symbols, binary, levels, sigma_v, probability)})
    print(json.dumps(out))


if __name__ == "__main__":
    main()
