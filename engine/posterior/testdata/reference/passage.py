"""Reference first-passage probabilities by mpmath with 30 digits: for passage.go.

    python3 passage.py        (Debian: python3-mpmath)

writes passage.csv beside itself: form (walk, trend, ballistic), mean, sd, slope,
slope_sd, correlation, walk (variance a second), lower, upper ("" if absent),
seconds, and the probabilities that the lower or the upper limit is crossed first
by then. Inputs are doubles, taken exactly.

Level and slope are integrated by composite Gauss-Legendre rules in two dimensions,
the slope given the level inside. Given both, one limit is the Bachelier-Levy
formula (Cox & Miller 1965, 5.7), and two limits the expansion in eigenfunctions
of the generator, subtracted from the probability of ever leaving on that side
(the same, 5.7) - where the package sums images and has the slope integrated in
closed form. A straight line (no walk) has the order of integration exchanged.
"""
import csv
import os
import random

from mpmath import erfc, exp, expm1, inf, mp, mpf, nstr, pi, sin, sqrt
from mpmath.calculus.quadrature import GaussLegendre

mp.dps = 30
HERE = os.path.dirname(os.path.abspath(__file__))
NODES = GaussLegendre(mp).calc_nodes(3, 110)  # 24 points or more
assert abs(sum(w for _, w in NODES) - 2) < mpf(10) ** -28


def Phi(z):
    return erfc(-z / sqrt(mpf(2))) / 2


def phi(z):
    return exp(-z * z / 2) / sqrt(2 * pi)


def integrate(f, cuts):
    total = mpf(0)
    for a, b in zip(cuts, cuts[1:]):
        h = (b - a) / 2
        total += h * sum(w * f(a + h + h * x) for x, w in NODES)
    return total


def one(gap, v, var, T):
    """Crossing a limit gap above, drift v, by T."""
    w = sqrt(var * T)
    return Phi((v * T - gap) / w) + exp(2 * v * gap / var) * Phi((-gap - v * T) / w)


def first_up(x, v, var, T, L):
    """Leaving (0, L) at L first and by T, from x."""
    y, v = L - x, -v  # distance to the limit, drift away from 0 being positive
    if v == 0:
        ever = 1 - y / L
    else:
        ever = exp(-2 * v * y / var) * expm1(-2 * v * (L - y) / var) / expm1(-2 * v * L / var)
    left, k = mpf(0), 0
    while True:
        k += 1
        rate = v * v / (2 * var) + k * k * pi**2 * var / (2 * L * L)
        e = exp(-rate * T)
        left += k * sin(k * pi * y / L) / rate * e
        if k * k * pi**2 * var * T / (2 * L * L) > 60:
            break
    return ever - exp(-v * y / var) * pi * var / (L * L) * left


def case(c):
    m, s, mu, tau, rho, var, lower, upper, T = [None if x is None else mpf(x) for x in c[1:]]
    hi = (upper - m) / s if upper is not None else mpf(12)
    lo = (lower - m) / s if lower is not None else mpf(-12)
    below = Phi(lo) if lower is not None else mpf(0)
    above = Phi(-hi) if upper is not None else mpf(0)
    lo, hi = max(lo, mpf(-12)), min(hi, mpf(12))
    if c[0] == "ballistic":
        return ballistic(m, s, mu, tau, rho, lower, upper, T, below, above)
    rest = tau * sqrt(1 - rho * rho)
    span = hi - lo
    cuts = [lo + span * mpf(f) for f in ("0", "0.04", "0.15", "0.3", "0.5", "0.7", "0.85", "0.96", "1")]

    def inner(z, up):
        x = m + s * z
        at = mu + rho * tau * z

        def f(v):
            if lower is None or upper is None:
                return one(upper - x, v, var, T) if up else one(x - lower, -v, var, T)
            if up:
                return first_up(x - lower, v, var, T, upper - lower)
            return first_up(upper - x, -v, var, T, upper - lower)

        if rest == 0:
            return f(at)
        return integrate(lambda q: phi(q) * f(at + rest * q), [mpf(q) for q in (-10, -4, 0, 4, 10)])

    if lower is not None:
        below += integrate(lambda z: phi(z) * inner(z, False), cuts)
    if upper is not None:
        above += integrate(lambda z: phi(z) * inner(z, True), cuts)
    return below, above


def ballistic(m, s, mu, tau, rho, lower, upper, T, below, above):
    rest = s * sqrt(1 - rho * rho)

    def mass(a, b):
        if not a < b:
            return mpf(0)
        return Phi(b) - Phi(a) if a < 0 else Phi(-a) - Phi(-b)

    def inner(q, up):
        v = mu + tau * q
        at = m + rho * s * q
        lo = -inf if lower is None else lower
        hi = inf if upper is None else upper
        if up:
            lo = max(lo, upper - v * T)
        else:
            hi = min(hi, lower - v * T)
        return mass((lo - at) / rest, (hi - at) / rest)

    # Kinks: v = 0 and, with two limits, v T = their distance.
    cuts = sorted([mpf(q) for q in (-12, -8, -5, -2, 0, 2, 5, 8, 12)]
                  + [(k - mu) / tau for k in ([mpf(0)] + ([(upper - lower) / T, (lower - upper) / T] if lower is not None and upper is not None else []))
                     if abs((k - mu) / tau) < 12])
    if lower is not None:
        below += integrate(lambda q: phi(q) * inner(q, False), cuts)
    if upper is not None:
        above += integrate(lambda q: phi(q) * inner(q, True), cuts)
    return below, above


def cases():
    r = random.Random(3)
    yield "trend", 0.0, 0.5, 0.1, 0.1, 0.5, 0.04, None, 1.0, 20.0  # the case with a figure in the requirement
    for i in range(48):
        form = ("walk", "trend", "ballistic")[i % 3]
        two = i // 3 % 2 == 1
        T = 10 ** r.uniform(-1, 5)
        w = 10 ** r.uniform(-2, 2)  # of the walk in T
        s = w * r.uniform(0.3, 2)
        m = r.uniform(-3, 3) * w
        gap = w * r.uniform(0.2, 3 if i % 4 else 7)
        tau = 0.0 if form == "walk" else w / T * r.uniform(0.1, 1.5)
        mu = 0.0 if form == "walk" else w / T * r.uniform(-2, 2)
        rho = 0.0 if form == "walk" else r.uniform(-0.9, 0.9)
        var = 0.0 if form == "ballistic" else w * w / T
        up, down = m + gap, m - w * r.uniform(0.3, 2)
        if not two:
            up, down = (up, None) if r.random() < 0.5 else (None, m - gap)
        yield form, m, s, mu, tau, rho, var, down, up, T


with open(os.path.join(HERE, "passage.csv"), "w") as f:
    out = csv.writer(f, lineterminator="\n")
    out.writerow("form mean sd slope slope_sd correlation walk lower upper seconds below above".split())
    for c in cases():
        b, a = case(c)
        out.writerow([("" if x is None else x if isinstance(x, str) else repr(x)) for x in c] + [nstr(b, 18), nstr(a, 18)])
        f.flush()
