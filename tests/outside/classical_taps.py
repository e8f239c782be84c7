"""Zero-forcing and least mean-square taps by numpy and scipy, for checks.md row 3."""
import json

import numpy as np
from scipy import optimize


def row_of(positions, p, main, k):
    return np.array([p[k - i + main] if 0 <= k - i + main < len(p) else 0.0 for i in positions])


def main():
    channels = [([0.407, 0.815, 0.407], 1), ([0.227, 0.460, 0.688, 0.460, 0.227], 2)]
    out = []
    for p, at in channels:
        for positions, dfe, noise in [([-2, -1, 0, 1, 2], [], 0.1), ([-1, 0, 1], [1], 0.05),
                                      ([-1, 0, 1, 2], [1], 0.3), ([-3, -2, -1, 0], [1, 2, 3], 0.0)]:
            n = len(positions)
            nulled, later = [], max(1, positions[-1])
            for i in positions:
                if i == 0:
                    continue
                k = i
                while k in dfe or k in nulled:
                    later += 1
                    k = later
                nulled.append(k)
            a = np.array([row_of(positions, p, at, 0)] + [row_of(positions, p, at, k) for k in nulled])
            forced = np.linalg.solve(a, np.eye(n)[0])

            variance, limit = 5 / 9, 0.8
            ks = [k for k in range(-20, 21) if k == 0 or k not in dfe]
            q = np.array([row_of(positions, p, at, k) for k in ks])
            want = np.array([1.0 if k == 0 else 0.0 for k in ks])

            def cost(x):
                u = x[:n] - x[n:]
                e = q @ u - want
                s = x.sum()
                slope = 2 * variance * (q.T @ e)
                noise_slope = 2 * (noise / limit) ** 2 * s
                return (variance * e @ e + (noise / limit * s) ** 2,
                        np.concatenate([slope + noise_slope, -slope + noise_slope]))

            best = optimize.minimize(cost, np.full(2 * n, 0.1), jac=True, method="L-BFGS-B",
                                     bounds=[(0, None)] * (2 * n),
                                     options={"maxiter": 100000, "maxfun": 1000000, "ftol": 1e-16,
                                              "gtol": 1e-12, "maxcor": 50})
            out.append({"p": p, "main": at, "positions": positions, "dfe": dfe, "noise": noise,
                        "symbol_variance": variance, "peak_limit": limit,
                        "zero_forcing": forced.tolist(), "condition": float(np.linalg.cond(a)),
                        "mean_square": float(best.fun)})
    print(json.dumps(out))


main()
