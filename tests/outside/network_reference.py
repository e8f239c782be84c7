"""Reference for network operations: circuit theory on voltages and currents with numpy.

Everything goes through impedance matrices and Kirchhoff's laws, so that no formula is shared with
the program, which works on waves. Prints JSON: the random networks drawn and what must come out.
"""
import json

import numpy as np

rng = np.random.default_rng(7)


def drawn(n):
    """A random passive, non-reciprocal S-matrix: largest singular value 0.9."""
    s = rng.normal(size=(n, n)) + 1j * rng.normal(size=(n, n))
    return 0.9 * s / np.linalg.norm(s, 2)


def z_of_s(s, ref):
    """Kurokawa 1965: a = (v + z i)/(2 sqrt(Re z)), b = (v - z* i)/(2 sqrt(Re z))."""
    f = np.diag(1 / (2 * np.sqrt(np.real(ref))))
    g = np.diag(ref)
    return np.linalg.inv(f) @ np.linalg.inv(np.eye(len(ref)) - s) @ (s @ g + g.conj()) @ f


def s_of_z(z, ref):
    f = np.diag(1 / (2 * np.sqrt(np.real(ref))))
    g = np.diag(ref)
    return f @ (z - g.conj()) @ np.linalg.inv(z + g) @ np.linalg.inv(f)


def flat(m):
    """Column-major list of [re, im]."""
    return [[x.real, x.imag] for x in np.asarray(m, complex).flatten(order="F")]


def joined(za, zb):
    """Two 2N-ports whose far and near ports are wired together; outer impedance matrix."""
    n = len(za) // 2
    a11, a12, a21, a22 = za[:n, :n], za[:n, n:], za[n:, :n], za[n:, n:]
    b11, b12, b21, b22 = zb[:n, :n], zb[:n, n:], zb[n:, :n], zb[n:, n:]
    # At the seam the voltages are equal and the currents opposite: i_b = -i_a =: x,
    # a21 i1 - a22 x = b11 x + b12 i4.
    m = np.linalg.inv(a22 + b11)
    x1, x4 = m @ a21, -m @ b12
    return np.block([[a11 - a12 @ x1, -a12 @ x4], [b21 @ x1, b22 + b21 @ x4]])


out = {"renormalised": [], "cascade": [], "mixed_mode": [], "terminated": [], "ended": []}

for n in (1, 2, 3, 4):
    for kind in ("real", "complex"):
        old = rng.uniform(20, 120, n) + (1j * rng.uniform(-40, 40, n) if kind == "complex" else 0)
        new = rng.uniform(20, 120, n) + (1j * rng.uniform(-40, 40, n) if kind == "complex" else 0)
        s = drawn(n)
        out["renormalised"].append({"s": flat(s), "old": flat(old), "new": flat(new),
                                    "wanted": flat(s_of_z(z_of_s(s, old), new))})

for n in (2, 4):
    for equal in (True, False):
        ref_a = np.full(n, 50.0) if equal else rng.uniform(20, 120, n)
        ref_b = np.full(n, 50.0) if equal else rng.uniform(20, 120, n)
        a, b = drawn(n), drawn(n)
        ref = np.concatenate([ref_a[: n // 2], ref_b[n // 2:]])
        z = joined(z_of_s(a, ref_a), z_of_s(b, ref_b))
        out["cascade"].append({"a": flat(a), "b": flat(b), "ref_a": flat(ref_a),
                               "ref_b": flat(ref_b), "ref": flat(ref),
                               "wanted": flat(s_of_z(z, ref))})

# Modes by their definition: v_d = v+ - v-, i_d = (i+ - i-)/2, v_c = (v+ + v-)/2, i_c = i+ + i-.
# Ports in order in+ in- out+ out-; modes d_in d_out c_in c_out.
v_of = np.array([[1, -1, 0, 0], [0, 0, 1, -1], [.5, .5, 0, 0], [0, 0, .5, .5]])
i_of = np.array([[.5, -.5, 0, 0], [0, 0, .5, -.5], [1, 1, 0, 0], [0, 0, 1, 1]])
for z0 in (50.0, 42.5):
    s = drawn(4)
    z = v_of @ z_of_s(s, np.full(4, z0)) @ np.linalg.inv(i_of)
    ref = np.array([2 * z0, 2 * z0, z0 / 2, z0 / 2])
    out["mixed_mode"].append({"s": flat(s), "z0": z0, "ref": flat(ref),
                              "wanted": flat(s_of_z(z, ref))})

# Terminated: generator e behind zs, capacitor cs across port 1; zl and cl across port 2.
# Unknown v1, v2, i1, i2:  v = Z i,  (e - v1)/zs = i1 + v1 j w cs,  -i2 = v2 (1/zl + j w cl).
for k in range(8):
    ref = np.array([50.0, 50.0]) if k < 4 else rng.uniform(20, 120, 2)
    s, f = drawn(2), 1e9 * rng.uniform(0.1, 10)
    zs = rng.uniform(10, 100) + (1j * rng.uniform(-40, 40) if k % 2 else 0)
    zl = rng.uniform(10, 100) + (1j * rng.uniform(-40, 40) if k % 2 else 0)
    cs, cl = (0, 0) if k in (0, 1) else rng.uniform(0.1e-12, 2e-12, 2)
    z = z_of_s(s, ref)
    w = 2 * np.pi * f
    m = np.array([[1, 0, -z[0, 0], -z[0, 1]], [0, 1, -z[1, 0], -z[1, 1]],
                  [1 / zs + 1j * w * cs, 0, 1, 0], [0, 1 / zl + 1j * w * cl, 0, 1]])
    e = 2.0
    v1, v2, i1, i2 = np.linalg.solve(m, [0, 0, e / zs, 0])
    out["terminated"].append({"s": flat(s), "ref": flat(ref), "f": f, "zs": flat([zs]),
                              "zl": flat([zl]), "cs": cs, "cl": cl, "wanted": flat([v2 / (e / 2)])})

# Port 3 of a four-port closed by an impedance: v3 = -zt i3.
for k in range(2):
    ref, s, zt = rng.uniform(20, 120, 4), drawn(4), rng.uniform(5, 200) + 1j * rng.uniform(-50, 50)
    z = z_of_s(s, ref)
    keep = [0, 1, 3]
    left = z[np.ix_(keep, keep)] - np.outer(z[keep, 2], z[2, keep]) / (z[2, 2] + zt)
    out["ended"].append({"s": flat(s), "ref": flat(ref), "zt": flat([zt]),
                         "wanted": flat(s_of_z(left, ref[keep]))})

print(json.dumps(out))
