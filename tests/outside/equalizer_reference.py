"""Receiver filter and CTLE by scipy.signal, for checks.md rows 15 and 16."""
import json

import numpy as np
from scipy import integrate, signal

GHZ = np.array([0.01, 0.5, 1.5, 3.57, 5.0, 8.0, 20.0])


def curve(b, a):
    _, h = signal.freqs(b, a, worN=2 * np.pi * GHZ * 1e9)
    return {"re": h.real.tolist(), "im": h.imag.tolist()}


def ctle(gain_db, fz, fp1, fp2):
    """(g + s/wz) / ((1 + s/wp1)(1 + s/wp2)) as polynomials in s."""
    wz, wp1, wp2 = (2 * np.pi * f * 1e9 for f in (fz, fp1, fp2))
    return [1 / wz, 10 ** (gain_db / 20)], np.polymul([1 / wp1, 1], [1 / wp2, 1])


def butter_power(f_over_fr):
    b, a = signal.butter(4, 1.0, analog=True)
    _, h = signal.freqs(b, a, worN=np.atleast_1d(f_over_fr))
    return float(np.abs(h[0]) ** 2)


def main():
    b, a = signal.butter(4, 2 * np.pi * 4.7e9, analog=True)
    two_pole = ctle(-6.0, 2.0, 2.0, 8.0)
    fine = np.linspace(0.1, 20, 199001)
    _, h = signal.freqs(*two_pole, worN=2 * np.pi * fine * 1e9)
    bandwidth = integrate.quad(butter_power, 0, 40, limit=500, epsabs=1e-11)[0]
    with_ctle = ctle(-4.0, 1.5625, 1.5625, 6.25)

    def power(f_ghz):
        _, hr = signal.freqs(b, a, worN=[2 * np.pi * f_ghz * 1e9])
        _, hc = signal.freqs(*with_ctle, worN=[2 * np.pi * f_ghz * 1e9])
        return float(np.abs(hr[0] * hc[0]) ** 2)

    print(json.dumps({
        "ghz": GHZ.tolist(),
        "butterworth": curve(b, a),
        "ctle": curve(*two_pole),
        "ctle_peak_db": float(20 * np.log10(np.abs(h).max())),
        "ctle_peak_ghz": float(fine[np.abs(h).argmax()]),
        "butterworth_noise_bandwidth": bandwidth,
        "power_ghz": integrate.quad(power, 0, 200, limit=1000, epsabs=1e-11)[0],
    }))


main()
