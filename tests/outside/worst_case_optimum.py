"""The best worst-case eye height of each link in a file, by HiGHS: checks.md row 5.

One linear program a phase with the DFE as variables, or a mixed-integer one where taps have codes;
codes are rounded and the value is recomputed from them. Prints a list of heights in volts.
"""
import json
import sys

import numpy as np
from scipy import optimize, sparse


def shifted(row, position, first, count):
    """Column of p_{k - position} for k = first ... first + count - 1."""
    values, main = row["values"], row["main"]
    k = np.arange(first, first + count) - position + main
    inside = (k >= 0) & (k < len(values))
    out = np.zeros(count)
    out[inside] = np.asarray(values)[k[inside]]
    return out


def columns(link, row):
    positions = [tap["position"] for tap in link["taps"]]
    low, high = min(positions + [0]), max(positions + [0])
    first = -row["main"] + low
    count = len(row["values"]) + high - low
    a = link["amplitude_v"] * np.array([shifted(row, p, first, count) for p in positions]).T
    return a, -first


def height(link, a, main, taps):
    q = a @ taps
    residual = np.abs(q)
    residual[main] = 0
    for tap in link["dfe"]:
        k = main + tap["position"]
        limit = tap["max"] * (q[main] if tap["relative"] else 1.0)
        if 0 <= k < len(q):
            residual[k] = max(0.0, abs(q[k]) - limit)
    return 2 * (q[main] / (link["levels"] - 1) - residual.sum())


def solve_phase(link, row):
    a, main = columns(link, row)
    num_rows, n = a.shape
    dfe = [t for t in link["dfe"] if main + t["position"] < num_rows]
    isi = [k for k in range(num_rows) if k != main]
    # x = taps, |taps|, d, u (|residual|), then one binary a code
    codes = [tap["codes"] for tap in link["taps"]]
    num_binary = sum(len(c) for c in codes)
    i_abs, i_d = n, 2 * n
    i_u = i_d + len(dfe)
    i_b = i_u + len(isi)
    size = i_b + num_binary
    lower, upper = np.full(size, -np.inf), np.full(size, np.inf)
    rows_ub, rhs_ub, rows_eq, rhs_eq = [], [], [], []

    def row_of(entries):
        r = np.zeros(size)
        for index, value in entries:
            r[index] += value
        return r

    for i, tap in enumerate(link["taps"]):
        lower[i], upper[i] = tap["min"], tap["max"]
        for sign in (1, -1):
            rows_ub.append(row_of([(i, sign), (i_abs + i, -1)]))
            rhs_ub.append(0)
    rows_ub.append(row_of([(i_abs + i, 1) for i in range(n)]))
    rhs_ub.append(link["peak_limit"])
    for j, tap in enumerate(dfe):
        if tap["relative"]:
            for sign in (1, -1):
                rows_ub.append(row_of([(i_d + j, sign)] +
                                      [(i, -tap["max"] * a[main, i]) for i in range(n)]))
                rhs_ub.append(0)
        else:
            lower[i_d + j], upper[i_d + j] = -tap["max"], tap["max"]
    for m, k in enumerate(isi):
        for sign in (1, -1):
            entries = [(i, sign * a[k, i]) for i in range(n)] + [(i_u + m, -1)]
            entries += [(i_d + j, -sign) for j, t in enumerate(dfe) if main + t["position"] == k]
            rows_ub.append(row_of(entries))
            rhs_ub.append(0)
        lower[i_u + m] = 0
    binary = i_b
    for i, values in enumerate(codes):
        if not values:
            continue
        span = range(binary, binary + len(values))
        rows_eq.append(row_of([(b, 1) for b in span]))
        rhs_eq.append(1)
        rows_eq.append(row_of([(i, -1)] + list(zip(span, values))))
        rhs_eq.append(0)
        lower[binary:binary + len(values)], upper[binary:binary + len(values)] = 0, 1
        binary += len(values)
    cost = np.zeros(size)
    cost[:n] = -a[main] / (link["levels"] - 1)
    cost[i_u:i_b] = 1
    if num_binary == 0:
        result = optimize.linprog(cost, A_ub=np.array(rows_ub), b_ub=rhs_ub,
                                  bounds=list(zip(lower, upper)), method="highs-ds",
                                  options={"primal_feasibility_tolerance": 1e-10,
                                           "dual_feasibility_tolerance": 1e-10})
        return None if result.status == 2 else -2 * result.fun
    constraints = [optimize.LinearConstraint(sparse.csr_matrix(np.array(rows_ub)), -np.inf, rhs_ub),
                   optimize.LinearConstraint(sparse.csr_matrix(np.array(rows_eq)), rhs_eq, rhs_eq)]
    integrality = np.zeros(size)
    integrality[i_b:] = 1
    result = optimize.milp(cost, integrality=integrality, bounds=optimize.Bounds(lower, upper),
                           constraints=constraints, options={"mip_rel_gap": 1e-9})
    if result.x is None:
        return None
    taps = np.array([values[int(np.argmin(np.abs(np.array(values) - result.x[i])))]
                     for i, values in enumerate(codes)])
    return height(link, a, main, taps)


def main():
    with open(sys.argv[1], encoding="utf-8") as file:
        links = json.load(file)
    best = []
    for link in links:
        values = [solve_phase(link, row) for row in link["rows"]]
        best.append(max(v for v in values if v is not None))
    print(json.dumps(best))


main()
