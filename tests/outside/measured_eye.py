"""Best worst-case eye of a measured channel, by a way that shares nothing with the program: own
Touchstone reader, own cascade and mixed mode, inverse FFT, and HiGHS for the settings.

    measured_eye.py FILE TIMES PRE_UI POST_UI

cascades FILE with itself to TIMES copies and prints one JSON object: the best eye height in mV over
the code grid (proven by HiGHS: linear programs bound every state and phase, integer programs settle
what the bounds leave open), where it lies, and the bound over real-valued taps.

The device: 10.3125 GBd PAM-2, swing 1000 mVppd, f_r = 0.75 f_b, CTLE 0 ... -8 dB by 1 with
f_z = f_p1 = f_b/4 and f_p2 = f_b, FIR pre [-0.25, 0], main [0.5, 1], post [-0.4, 0] by 0.0125 under
the peak limit 1, DFE +-50, +-30, +-20 mV unquantised, 32 phases per UI.
"""

import json
import sys

import numpy as np
from scipy.optimize import Bounds, LinearConstraint, milp
from scipy.sparse import csr_matrix, eye as identity, hstack, vstack

SYMBOL_RATE_HZ = 10.3125e9
UI_S = 1 / SYMBOL_RATE_HZ
PHASES = 32
LAUNCH_V = 0.5
STEP = 0.0125
TAP_CODES = [(-20, 0), (40, 80), (-32, 0)]
DFE_V = [0.050, 0.030, 0.020]


def read_touchstone(path):
    """Frequencies in Hz (n) and S (n, ports, ports) of a version 1 file."""
    ports = int(path[-2])
    unit, form, numbers = 1e9, "MA", []
    with open(path, encoding="latin-1") as file:
        for line in file:
            line = line.split("!")[0].strip()
            if line.startswith("#"):
                for word in line[1:].upper().split():
                    unit = {"HZ": 1, "KHZ": 1e3, "MHZ": 1e6, "GHZ": 1e9}.get(word, unit)
                    form = word if word in ("RI", "MA", "DB") else form
            elif line:
                numbers.extend(map(float, line.split()))
    table = np.reshape(numbers, (-1, 1 + 2 * ports**2))
    first, second = table[:, 1::2], table[:, 2::2]
    if form == "RI":
        s = first + 1j * second
    else:
        s = (10 ** (first / 20) if form == "DB" else first) * np.exp(1j * np.radians(second))
    s = s.reshape(-1, ports, ports)
    # Touchstone lists a two-port as S11 S21 S12 S22, everything else row by row.
    return table[:, 0] * unit, s.transpose(0, 2, 1) if ports == 2 else s


def cascaded(a, b):
    """S of b connected behind a; the first half of the ports faces left."""
    n = a.shape[1] // 2
    one = np.eye(n)
    a11, a12, a21, a22 = a[:, :n, :n], a[:, :n, n:], a[:, n:, :n], a[:, n:, n:]
    b11, b12, b21, b22 = b[:, :n, :n], b[:, :n, n:], b[:, n:, :n], b[:, n:, n:]
    forth = np.linalg.inv(one - a22 @ b11)
    back = np.linalg.inv(one - b11 @ a22)
    return np.block([[a11 + a12 @ b11 @ forth @ a21, a12 @ back @ b12],
                     [b21 @ forth @ a21, b22 + b21 @ a22 @ back @ b12]])


def transfer(path, times):
    """Frequencies and H: s21, or sdd21 with ports 1, 2 in and 3, 4 out, between matched ends."""
    f, s = read_touchstone(path)
    total = s
    for _ in range(times - 1):
        total = cascaded(total, s)
    if s.shape[1] == 2:
        return f, total[:, 1, 0]
    return f, 0.5 * (total[:, 2, 0] - total[:, 2, 1] - total[:, 3, 0] + total[:, 3, 1])


def pulses(f, h):
    """For each CTLE gain: one record of the pulse in volts, PHASES samples per UI."""
    n = int(np.ceil(1 / (f[1] - f[0]) / UI_S)) * PHASES
    grid = np.arange(n // 2 + 1) / (n * UI_S / PHASES)
    log_size, phase = np.log(np.abs(h)), np.unwrap(np.angle(h))
    at_dc = np.polyfit(np.sqrt(f[:10]), log_size[:10], 1)[1]
    turns = np.pi * np.round(np.polyfit(f[:10], phase[:10], 1)[1] / np.pi)
    known = np.r_[0, f]
    response = np.exp(np.interp(grid, known, np.r_[at_dc, log_size])
                      + 1j * np.interp(grid, known, np.r_[turns, phase]))
    response[grid > f[-1]] = 0
    x = grid / (0.75 * SYMBOL_RATE_HZ)
    response /= 1 - 3.414214 * x**2 + x**4 + 2.613126j * (x - x**3)
    response *= LAUNCH_V * np.sinc(grid * UI_S) * np.exp(-1j * np.pi * grid * UI_S) * PHASES
    y = 1j * grid / SYMBOL_RATE_HZ
    for gain_db in range(0, -9, -1):
        ctle = (10 ** (gain_db / 20) + 4 * y) / ((1 + 4 * y) * (1 + y))
        yield gain_db, np.fft.irfft(response * ctle, n)


def program(pulse, instant, pre_ui, post_ui):
    """max 2 (q_0 - sum |r_k|) over the tap codes n, the DFE volts d and t_k >= |r_k|, as milp takes
    it: the cost (to be minimised), the constraints and the bounds."""
    k = np.arange(-pre_ui, post_ui + 1)
    p = np.zeros(len(k) + 4)
    p[2:-2] = pulse[(instant + k * PHASES) % len(pulse)]
    # q_k = sum_i c_i p_{k-i} for k = -pre_ui - 1 ... post_ui + 1; rows of q per tap code.
    q = STEP * np.stack([p[2:], p[1:-1], p[:-2]], axis=1)
    main = pre_ui + 1
    d = np.zeros((len(q), 3))
    d[main + 1:main + 4] = np.eye(3)
    isi = np.delete(np.arange(len(q)), main)
    r = csr_matrix(np.hstack([q, -d])[isi])
    t = identity(len(isi))
    limit = csr_matrix(([-1, 1, -1], ([0, 0, 0], [0, 1, 2])), shape=(1, 6 + len(isi)))
    rows = vstack([hstack([r, -t]), hstack([-r, -t]), limit])
    low = np.full(rows.shape[0], -np.inf)
    high = np.zeros(rows.shape[0])
    high[-1] = 1 / STEP
    bounds = Bounds(np.r_[[c[0] for c in TAP_CODES], -np.array(DFE_V), np.zeros(len(isi))],
                    np.r_[[c[1] for c in TAP_CODES], DFE_V, np.full(len(isi), np.inf)])
    cost = np.r_[-2 * q[main], 0, 0, 0, np.full(len(isi), 2.0)]
    return cost, LinearConstraint(rows, low, high), bounds


def solved(cost, constraints, bounds, whole_codes):
    integrality = np.zeros(len(cost))
    integrality[:3] = whole_codes
    result = milp(cost, constraints=constraints, bounds=bounds, integrality=integrality,
                  options={"mip_rel_gap": 1e-9})
    assert result.status == 0, result.message
    return -result.fun, result.x


def main(path, times, pre_ui, post_ui):
    candidates = []
    for gain_db, pulse in pulses(*transfer(path, times)):
        peak = int(np.argmax(pulse))
        # One UI of phases around the peak at each of the two main cursors next to it.
        for offset in range(-PHASES, PHASES):
            problem = program(pulse, peak + offset, pre_ui, post_ui)
            candidates.append((solved(*problem, False)[0], gain_db, offset, problem))
    candidates.sort(key=lambda c: -c[0])
    best_v, best = -np.inf, None
    for bound_v, gain_db, offset, problem in candidates:
        if bound_v <= best_v:
            break
        value_v, x = solved(*problem, True)
        if value_v > best_v:
            best_v = value_v
            best = {"eye_height_mv": 1e3 * value_v, "ctle_dc_gain_db": gain_db,
                    "phase_samples": offset,
                    "tx_fir": [round(STEP * n, 4) for n in np.round(x[:3])],
                    "dfe_mv": list(1e3 * x[3:6])}
    best["real_valued_bound_mv"] = 1e3 * candidates[0][0]
    print(json.dumps(best))


if __name__ == "__main__":
    main(sys.argv[1], *map(int, sys.argv[2:5]))
