"""Whole jobs by tapwright and by numpy and scipy: the same problem, the same answer checked first,
processor times and their ratio from one run, each on one thread.

    compare.py JOBS_PROGRAM [JOB ...]

A ratio is the script's median time over the program's; the range beside it puts the script's
fastest against the program's slowest and the other way round. Where the script would take hours it
does a sample of the (CTLE state, phase) pairs, and its time is scaled up by their number.
"""

import os

for variable in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[variable] = "1"

import json
import statistics
import subprocess
import sys
import tempfile
import time

import numpy as np
from scipy.optimize import Bounds, LinearConstraint, milp
from scipy.sparse import csr_matrix, eye as identity, hstack, vstack
from scipy.stats import norm


def timed(function, repeats):
    seconds, result = [], None
    for _ in range(repeats):
        start = time.process_time()
        result = function()
        seconds.append(time.process_time() - start)
    return result, seconds


def load(folder, name, shape=-1):
    return np.fromfile(f"{folder}/{name}").reshape(shape)


def check(found, wanted, tolerance, what):
    """Relative to the size of `wanted`."""
    found, wanted = np.asarray(found), np.asarray(wanted)
    error = np.max(np.abs(found - wanted)) / np.max(np.abs(wanted))
    if not error <= tolerance:
        sys.exit(f"{what}: the answers differ by {error:.2g} of their size: {found} and {wanted}")


def read_touchstone(problem, answer, folder):
    def read():
        with open(f"{folder}/{problem['file']}", encoding="ascii") as file:
            lines = [line for line in file if line[0] not in "!#"]
        table = np.fromstring(" ".join(lines), sep=" ")
        table = table.reshape(-1, 1 + 2 * problem["ports"] ** 2)
        return table[:, 1::2] + 1j * table[:, 2::2]

    s, seconds = timed(read, 3)
    check([s.real.sum(), s.imag.sum()], answer, 1e-9, problem["file"])
    return {"numpy": seconds}


def state_pulses(problem, folder):
    """The pulses of every CTLE state, (states, samples), at 1 V launch."""
    spectrum = load(folder, "spectrum.f64").view(complex)
    f = np.arange(len(spectrum)) * problem["df_hz"]
    x = f / problem["bandwidth_hz"]
    spectrum = spectrum / (1 - 3.414214 * x**2 + x**4 + 2.613126j * (x - x**3))
    records = []
    for g, f_z, f_p1, f_p2, g_lf, f_lf in load(folder, "states.f64", (-1, 6)):
        ctle = (10 ** (g / 20) + 1j * f / f_z) / ((1 + 1j * f / f_p1) * (1 + 1j * f / f_p2))
        ctle *= (10 ** (g_lf / 20) + 1j * f / f_lf) / (1 + 1j * f / f_lf)
        records.append(np.fft.irfft(spectrum * ctle, problem["num_samples"]))
    return np.array(records)


def pulses(problem, answer, folder):
    records, seconds = timed(lambda: state_pulses(problem, folder), 3)
    check(records.max(axis=1), answer, 1e-6, "pulses")
    return {"numpy": seconds}


def evaluations(problem, answer, folder):
    cursors = load(folder, "cursors.f64", (problem["taps"], -1)).T.copy()
    settings = load(folder, "settings.f64", (problem["count"], -1)).T.copy()
    sums, seconds = timed(lambda: np.abs(cursors @ settings).sum(axis=0), 5)
    check([sums.min(), sums.max(), sums.sum()], answer, 1e-12, "evaluations")
    return {"numpy, all at once": seconds}


def exceeded_level(problem, answer, folder):
    symbols_v = load(folder, "symbols.f64")
    step_v = 20e-6

    def convolve():
        sigma = problem["sigma_v"]
        reach = int(np.ceil((np.abs(symbols_v).sum() + 10 * sigma) / step_v)) + len(symbols_v)
        grid_v = step_v * np.arange(-reach, reach + 1)
        mass = np.exp(-0.5 * (grid_v / sigma) ** 2)
        mass /= mass.sum()
        for amplitude in np.abs(symbols_v) / step_v:
            whole = int(amplitude)
            part = amplitude - whole
            spread = np.zeros(2 * whole + 3)
            spread[[0, -1]] = 0.5 * part
            spread[1] += 0.5 * (1 - part)
            spread[-2] += 0.5 * (1 - part)
            # Only four bins are not zero, so shifts beat a convolution.
            total = np.zeros_like(mass)
            for bin_index in np.flatnonzero(spread):
                total += spread[bin_index] * np.roll(mass, bin_index - whole - 1)
            mass = total
        tail = np.cumsum(mass[::-1])[::-1]
        last = np.flatnonzero(tail > problem["probability"])[-1]
        a, b = np.log(tail[last:last + 2])
        return grid_v[last] - step_v / 2 + step_v * (a - np.log(problem["probability"])) / (a - b)

    level_v, seconds = timed(convolve, 3)
    # The split over two bins errs by at most theta K step^2 / 8 = 0.05 mV here.
    check(level_v, answer, 5e-5 / answer, "exceeded level")
    return {"numpy, 20 uV grid": seconds}


def proof(problem, answer, folder):
    if not answer["proven"]:
        sys.exit("proof: not proven")
    records = problem["amplitude_v"] * state_pulses(problem, folder)
    taps, per_ui = problem["taps"], problem["samples_per_ui"]
    first, last = taps[0]["position"], taps[-1]["position"]
    steps = np.array([(t["max"] - t["min"]) / (t["codes"] - 1) for t in taps])
    low = np.array([t["min"] for t in taps])
    num_codes = [t["codes"] for t in taps]
    dfe_v = np.array(problem["dfe_v"])
    gaussian_v = -norm.ppf(problem["error_ratio"]) * problem["noise_rms_v"]
    main = problem["span_ui"][0] - first

    def cursors(state, phase):
        """q = cursors @ taps at the main cursor index `main`."""
        record = records[state]
        k = np.arange(-problem["span_ui"][0], problem["span_ui"][1] + 1)
        p = record[(np.argmax(record) + phase + k * per_ui) % len(record)]
        q = np.zeros((len(p) + last - first, len(taps)))
        for column, tap in enumerate(taps):
            start = tap["position"] - first
            q[start:start + len(p), column] = p
        return q

    def heights(q, c):
        """Worst-case eye heights of settings in the columns of c."""
        cursor = q @ c
        r = np.abs(cursor)
        for k, limit in enumerate(dfe_v):
            r[main + 1 + k] = np.maximum(r[main + 1 + k] - limit, 0)
        return 2 * (cursor[main] - (r.sum(axis=0) - r[main]) - gaussian_v)

    def by_milp(state, phase):
        q = cursors(state, phase)
        isi = np.delete(np.arange(len(q)), main)
        d = np.zeros((len(q), len(dfe_v)))
        d[main + 1:main + 1 + len(dfe_v)] = np.eye(len(dfe_v))
        m = len(taps)
        # Variables: codes n (taps = low + steps n), sizes a >= |tap|, d, t >= |r|.
        blank = csr_matrix((len(isi), m))
        r_n, r_d, t = csr_matrix((q * steps)[isi]), csr_matrix(-d[isi]), identity(len(isi))
        offset = (q @ low)[isi]
        size_rows = csr_matrix(np.diag(steps))
        no_d, no_t = csr_matrix((m, len(dfe_v))), csr_matrix((m, len(isi)))
        rows = vstack([hstack([r_n, blank, r_d, -t]), hstack([-r_n, blank, -r_d, -t]),
                       hstack([size_rows, -identity(m), no_d, no_t]),
                       hstack([-size_rows, -identity(m), no_d, no_t]),
                       hstack([csr_matrix((1, m)), csr_matrix(np.ones((1, m))), no_d[:1], no_t[:1]])])
        high = np.r_[-offset, offset, -low, low, 1.0]
        cost = np.r_[-2 * q[main] * steps, np.zeros(m + len(dfe_v)), np.full(len(isi), 2.0)]
        bounds = Bounds(np.r_[np.zeros(2 * m), -dfe_v, np.zeros(len(isi))],
                        np.r_[np.array(num_codes) - 1, np.ones(m), dfe_v,
                              np.full(len(isi), np.inf)])
        integrality = np.r_[np.ones(m), np.zeros(m + len(dfe_v) + len(isi))]
        result = milp(cost, constraints=LinearConstraint(rows, -np.inf, high), bounds=bounds,
                      integrality=integrality, options={"mip_rel_gap": 1e-9})
        # HiGHS keeps limits to 1e-6 only: codes are rounded and the value computed afresh.
        return heights(q, low + steps * np.round(result.x[:m]))

    def by_grid(state, phase, block):
        """A block of 64 x 64 settings of the full grid."""
        q = cursors(state, phase)
        codes = np.array(np.unravel_index(block * 4096 + np.arange(4096), num_codes))
        c = low[:, None] + steps[:, None] * codes
        return np.where(np.abs(c).sum(axis=0) > 1 + 1e-9, -np.inf, heights(q, c)).max()

    best = by_milp(answer["ctle_index"], answer["phase_samples"])
    check(best, answer["height_v"], 1e-9, "proof")
    random = np.random.default_rng(1)
    sample = [(int(random.integers(len(records))), int(random.integers(-per_ui, per_ui)))
              for _ in range(12)]
    milp_seconds, grid_seconds = [], []
    for state, phase in sample:
        height_v, seconds = timed(lambda: by_milp(state, phase), 1)
        if height_v > answer["height_v"] * (1 + 1e-9):
            sys.exit(f"proof: state {state}, phase {phase} has a better setting: {height_v} V")
        milp_seconds += seconds
        block = int(random.integers(np.prod(num_codes) // 4096))
        _, seconds = timed(lambda: by_grid(state, phase, block), 1)
        grid_seconds += seconds
    pairs = len(records) * 2 * per_ui
    blocks = np.prod(num_codes) / 4096

    # Each a time for the whole from a third of the sample, so that they have a spread.
    def thirds(seconds, scale):
        return [statistics.mean(seconds[i::3]) * scale for i in range(3)]

    return {f"scipy milp, {len(sample)} of {pairs} states and phases":
                thirds(milp_seconds, pairs),
            f"numpy full grid, {len(sample)} of {pairs * int(blocks)} blocks":
                thirds(grid_seconds, pairs * blocks)}


JOBS = {  # name: (what it is, script, repeats of the program)
    "read_2_port": ("read a 10 000-point two-port", read_touchstone, 9),
    "read_32_port": ("read a 2 000-point 32-port", read_touchstone, 3),
    "pulses": ("pulses of 256 CTLE states", pulses, 5),
    "evaluations": ("20 000 raw evaluations, 200 cursors, 4 taps", evaluations, 9),
    "exceeded_level": ("N(1e-12) of 200 cursors", exceeded_level, 99),
    "proof_3_taps": ("proof: 3 taps x 64 codes, 256 states x 32 phases, 5 DFE taps", proof, 9),
    "proof_5_taps": ("proof: 5 taps x 64 codes, the rest alike", proof, 5),
}


def shown(seconds):
    for unit, scale in (("s", 1), ("ms", 1e-3), ("us", 1e-6), ("ns", 1e-9)):
        if seconds >= scale:
            return f"{seconds / scale:.3g} {unit}"
    return f"{seconds:.3g} s"


def main(program, names):
    for name in names or JOBS:
        title, script, repeats = JOBS[name]
        with tempfile.TemporaryDirectory() as folder:
            run = subprocess.run([program, name, str(repeats), folder], check=True,
                                 stdout=subprocess.PIPE)
            ours = json.loads(run.stdout)
            theirs = script(ours["problem"], ours["answer"], folder)
        seconds = ours["seconds"]
        print(f"{title}\n  tapwright   {shown(statistics.median(seconds))}"
              f"   ({shown(min(seconds))} to {shown(max(seconds))}, {len(seconds)} times)")
        for label, other in theirs.items():
            ratio = statistics.median(other) / statistics.median(seconds)
            print(f"  {label}   {shown(statistics.median(other))}"
                  f"   ({shown(min(other))} to {shown(max(other))})\n"
                  f"  ratio   {ratio:.3g}   ({min(other) / max(seconds):.3g} to "
                  f"{max(other) / min(seconds):.3g}), same answer")
        sys.stdout.flush()


main(sys.argv[1], sys.argv[2:])
