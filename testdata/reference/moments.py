"""Reference standard deviations where the second moment barely exists, by mpmath
with 40 digits.

    python3 moments.py        (Debian: python3-mpmath)

writes moments.csv beside itself. Inputs are doubles, taken exactly. By the law of
total variance, with the level integrated out by r last,

    Var next = Var level + E r^2.

The level's own moments come from its density, normal prior times Student
likelihood: p(t) ~ N(t; m, s^2) (A + n (t - mean)^2)^(-(worth + n) / 2). Given the
level, r^2 is scaled inverse chi-squared with worth + n degrees of freedom and sum
A + n (t - mean)^2, whence E r^2 = E (A + n (t - mean)^2) / (worth + n - 2): a
closed form for the tail in r, that the package sums as a series.
"""
import csv
import os

from mpmath import exp, log, mp, mpf, nstr, quad, sqrt

mp.dps = 40
HERE = os.path.dirname(os.path.abspath(__file__))


def next_sd(mean0, sd0, guess, worth, readings):
    m, s, worth = mpf(mean0), mpf(sd0), mpf(worth)
    a, n = worth * mpf(guess) ** 2, len(readings)
    if n == 0:
        return s, sqrt(s ** 2 + a / (worth - 2))
    ys = [mpf(y) for y in readings]
    mean = sum(ys) / n
    a += sum((y - mean) ** 2 for y in ys)
    scale = sqrt(a / n)
    pts = {m + k * s * j for k in (-1, 1) for j in (0, 0.5, 1, 2, 4, 8, 14, 20)}
    pts |= {mean + k * scale * mpf(2) ** j for k in (-1, 1) for j in range(-2, 180)} | {mean}
    pts = sorted(p for p in pts if abs(p - m) <= 20 * s)
    f = lambda t: exp(-((t - m) / s) ** 2 / 2 - (worth + n) / 2 * log(1 + n * (t - mean) ** 2 / a))
    z = quad(f, pts)
    shift = quad(lambda t: f(t) * (t - m), pts) / z
    var = quad(lambda t: f(t) * (t - m - shift) ** 2, pts) / z
    r2 = quad(lambda t: f(t) * (a + n * (t - mean) ** 2), pts) / z / (worth + n - 2)
    return sqrt(var), sqrt(var + r2)


CASES = [(0.0, 1.0, 0.02, w, r) for r, ws in (
    ((), (2.01, 2.1, 3.0, 2.000001)),
    ((1.0,), (1.01, 1.1, 2.0, 1.000001)),
    ((0.0, 1.0), (0.01, 0.1, 1.0, 0.001)),
    ((0.0, 1.0, 1.5), (0.0, 1.0)),
) for w in ws] + [
    (0.0, 1e6, 0.02, 1.01, (1.0,)), (0.0, 1e-6, 0.02, 1.01, (1.0,)), (0.0, 1e30, 1e-20, 1.0625, (3.0,)),
    (0.0, 1e30, 1e-20, 1.5, (3.0,)), (5.0, 0.01, 0.5, 1.1, (400.0,)),
]

if __name__ == "__main__":
    with open(os.path.join(HERE, "moments.csv"), "w", newline="") as f:
        w = csv.writer(f, lineterminator="\n")
        w.writerow(("mean", "sd", "guess", "worth", "readings", "level_sd", "next_sd"))
        for c in CASES:
            level, nxt = next_sd(*c)
            row = [repr(x) for x in c[:4]] + [" ".join(map(repr, c[4]))]
            w.writerow(row + [nstr(x, 20, min_fixed=1, max_fixed=0) for x in (level, nxt)])
