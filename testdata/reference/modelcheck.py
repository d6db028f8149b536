"""Null distributions of checks of a model, by mpmath: for engine/modelcheck.

    python3 modelcheck.py        (Debian: python3-mpmath)

writes beside itself

- serial.csv: n, r, P(|R| > r) for R = sum z_k z_(k+1) / sum z_k^2 of n standard normal
  scores, by Imhof's integral over the real line (Biometrika 1961, 48, 419-426) with so many
  digits that its difference from 1/2 keeps 20 of them;
- truncated.csv: a, b, E Z and E Z^2 for a standard normal Z between a and b, by quadrature of
  its density;
- squares.csv: n, x, P(X < x) and P(X > x) for chi-squared X, by the incomplete gamma functions;
- scores.csv: z, P(Z < z) and P(Z > z), by erfc;
- runlength.csv: h and the mean run length of the two-sided CUSUM with k = 1/2, by Page's integral
  equation in piecewise Gauss-Legendre quadrature with 30 digits; with more pieces the same.
"""
import csv
import os

from mpmath import atan, binomial, cos, erfc, exp, gammainc, legendre, log, lu_solve, matrix, mp, mpf, nstr, pi, polyroots, quad, sin, sqrt

HERE = os.path.dirname(os.path.abspath(__file__))


def table(name, header, rows):
    with open(os.path.join(HERE, name), "w", newline="") as f:
        w = csv.writer(f, lineterminator="\n")
        w.writerow(header)
        for row in rows:
            w.writerow([v if isinstance(v, str) else repr(v) for v in row])


def number(v):
    return nstr(v, 17, min_fixed=0, max_fixed=0)


def serial(n, r):
    # P(Q > 0) = 1/2 + 1/pi int_0^inf sin(theta(u)) / (u rho(u)) du for Q = sum a_k z_k^2,
    # theta = sum atan(a_k u) / 2, rho = prod (1 + a_k^2 u^2)^(1/4).
    a = [cos(k * pi / (n + 1)) - mpf(r) for k in range(1, n + 1)]

    def f(u):
        rho = mpf(1)
        for x in a:
            rho *= 1 + x * x * u * u
        return sin(sum(atan(x * u) for x in a) / 2) / (u * rho ** mpf(0.25))

    # By x = ln u the integrand vanishes doubly fast on the left and as exp(-n x / 2)
    # on the right; the trapezoid rule halves its step until it has settled.
    lo, hi = mpf(-mp.dps) * log(10), mp.dps * log(10) * 2 / mpf(n) + 3
    g = lambda x: f(exp(x)) * exp(x)
    step, sums, before = mpf(1) / 4, None, None
    while True:
        k0, k1 = int(lo / step), int(hi / step)
        ks = range(k0, k1 + 1) if sums is None else [k for k in range(k0, k1 + 1) if k % 2]
        sums = (sums or 0) + sum(g(k * step) for k in ks)
        p = mpf(1) / 2 + step * sums / pi
        if before is not None and abs(p - before) < mpf(10) ** -18 * abs(p):
            return 2 * p
        before, step = p, step / 2


def truncated(a, b):
    a, b = mpf(a), mpf(b)
    low = 0 if a <= 0 <= b else min(abs(a), abs(b))
    f = lambda x: exp((low * low - x * x) / 2)
    cuts = [a] + [mpf(x) for x in range(-40, 41) if a < x < b] + [b]
    if a > 1:
        cuts = sorted(set(cuts + [a + k / a for k in (1, 3, 10, 30) if a + k / a < b]))
    if b < -1:
        cuts = sorted(set(cuts + [b + k / b for k in (1, 3, 10, 30) if b + k / b > a]))
    mass = quad(f, cuts)
    return quad(lambda x: x * f(x), cuts) / mass, quad(lambda x: x * x * f(x), cuts) / mass


def gauss(n):
    # Nodes and weights on [0, 1]: roots of the Legendre polynomial (DLMF 18.5.8).
    terms = [(-1) ** (m // 2) * binomial(n, m // 2) * binomial(2 * n - m, n) if m % 2 == 0 else 0 for m in range(n + 1)]
    x = polyroots(terms, maxsteps=200, extraprec=200)
    slope = lambda t: n * (t * legendre(n, t) - legendre(n - 1, t)) / (t * t - 1)
    return [((1 + t) / 2, 1 / ((1 - t * t) * slope(t) ** 2)) for t in x]


def run_length(h, pieces, rule):
    # L(z) = 1 + L(0) F(k - z) + int_0^h L(x) f(x + k - z) dx on one side; both have half.
    k, width = mpf(1) / 2, mpf(h) / pieces
    nodes = [((i + x) * width, w * width) for i in range(pieces) for x, w in rule]
    z = [x for x, _ in nodes] + [mpf(0)]
    a = matrix(len(z), len(z))
    for i, y in enumerate(z):
        for j, (x, w) in enumerate(nodes):
            a[i, j] = -w * exp(-((x + k - y) ** 2) / 2) / sqrt(2 * pi)
        a[i, len(z) - 1] = -erfc((y - k) / sqrt(2)) / 2
        a[i, i] += 1
    return lu_solve(a, matrix([1] * len(z)))[len(z) - 1] / 2


if __name__ == "__main__":
    rows = []
    for n, rs in ((16, (0.05, 0.3, 0.5, 0.7, 0.9)), (64, (0.01, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.9)), (200, (0.03, 0.2, 0.4))):
        for r in rs:
            mp.dps = 50
            rows.append((n, r, number(serial(n, r))))
    table("serial.csv", ("n", "r", "two_sided"), rows)

    mp.dps = 30
    ends = (
        (-1, 1), (-0.5, 0.75), (-38, 0.25), (0, 1e-9), (-1e-9, 2e-9), (1.5, 1.50001), (1.9, 2.1), (3, 38), (3.9, 3.95), (4.1, 38),
        (-6, -5), (-38, -12), (12, 12.01), (20, 20.001), (30, 37.5), (37.9, 38), (-0.3, 0.9), (-38, 38), (0.5, 1.6), (-2.5, -0.1), (0.4, 1.3),
    )
    table("truncated.csv", ("a", "b", "mean", "square"), [(float(a), float(b)) + tuple(map(number, truncated(a, b))) for a, b in ends])

    rows = []
    for n in (16, 64, 65, 200, 4096):
        for z in (-6, -4, -2.5, 0, 2.5, 4, 6, 10):
            x = float(n * (1 - 2 / (9 * n) + z * (2 / (9 * n)) ** 0.5) ** 3)
            if x > 0:
                half, y = mpf(n) / 2, mpf(x) / 2
                rows.append((n, x, number(gammainc(half, 0, y, regularized=True)), number(gammainc(half, y, regularized=True))))
    table("squares.csv", ("n", "x", "below", "above"), rows)

    rows = []
    for z in (-37, -20.5, -8, -3.9, -1, -1e-3, 0.5, 1.96, 5, 9.25, 25, 36.5):
        rows.append((float(z), number(erfc(-mpf(z) / sqrt(2)) / 2), number(erfc(mpf(z) / sqrt(2)) / 2)))
    table("scores.csv", ("z", "below", "above"), rows)

    rule, rows = gauss(12), []
    for h in (1.5, 3.5, 4.0, 5.0, 8.1, 12.66, 19.5):
        pieces = 3 + int(h / 2)
        fine = run_length(h, pieces + 1, rule)
        assert abs(run_length(h, pieces, rule) / fine - 1) < 1e-11
        rows.append((h, number(fine)))
    table("runlength.csv", ("h", "run_length"), rows)
