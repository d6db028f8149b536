"""Reference numbers for blends of distributions and for their exponentials, by
mpmath with 50 digits.

    python3 blend.py        (Debian: python3-mpmath)

writes blend.json beside itself. Inputs are doubles, taken exactly; a tail is the sum
of the parts' tails, normal ones by erfc, Student ones by the incomplete beta
function; a quantile is found by halving an interval; moments of the exponentials
come from quadrature over the density of X, not from the lognormal formulas.
"""
import json
import os
import random

from mpmath import betainc, erfc, exp, gamma, log, mp, mpf, nstr, pi, quad, sqrt

mp.dps = 50
HERE = os.path.dirname(os.path.abspath(__file__))


def tail(z, d):
    """P(Z > z) of a standard normal Z, or of Student t with d degrees of freedom."""
    if d == 0 and abs(z) > 1000:
        return mpf(0 if z > 0 else 1)  # erfc is below 1e-200000
    if d == 0:
        return erfc(z / sqrt(mpf(2))) / 2
    beyond = betainc(mpf(d) / 2, mpf(1) / 2, 0, d / (d + z * z), regularized=True) / 2
    return beyond if z > 0 else 1 - beyond


class Blend:
    """Parts are (location, scale, degrees of freedom or 0 for a normal one)."""

    def __init__(self, logs, parts):
        top = max(logs)
        w = [exp(mpf(x) - mpf(top)) for x in logs]
        self.w = [x / sum(w) for x in w]
        self.parts = [(mpf(m), mpf(s), d) for m, s, d in parts]

    def upper(self, x, sign=1):
        return sum(w * tail(sign * (x - m) / s, d) for w, (m, s, d) in zip(self.w, self.parts))

    def between(self, x, y):
        total = mpf(0)
        for w, (m, s, d) in zip(self.w, self.parts):
            sign = 1 if x > m else -1  # the tails that are small
            total += w * abs(tail(sign * (x - m) / s, d) - tail(sign * (y - m) / s, d))
        return total

    def quantile(self, p):
        f = lambda x: self.upper(x, -1) < p
        lo, hi = self.parts[0][0], self.parts[0][0]
        step = max(q[1] for q in self.parts)
        while not f(lo):
            lo, step = lo - step, 2 * step
        step = max(q[1] for q in self.parts)
        while f(hi):
            hi, step = hi + step, 2 * step
        while hi - lo > mpf(10) ** -30 * min(q[1] for q in self.parts) + mpf(10) ** -40 * abs(lo):
            x = (lo + hi) / 2
            if f(x):
                lo = x
            else:
                hi = x
        return lo

    def moments(self):
        if any(d and d <= 2 for _, _, d in self.parts):
            return None, None
        mean = sum(w * m for w, (m, _, _) in zip(self.w, self.parts))
        var = sum(w * ((s * s * d / (d - 2) if d else s * s) + (m - mean) ** 2) for w, (m, s, d) in zip(self.w, self.parts))
        return mean, sqrt(var)

    def density(self, x):
        return sum(w * exp(-((x - m) / s) ** 2 / 2) / s / sqrt(2 * pi) for w, (m, s, _) in zip(self.w, self.parts))

    def exponential_moments(self):
        ends = sorted(self.parts, key=lambda p: p[1])[:: max(1, len(self.parts) - 1)]
        ends += self.parts if len(self.parts) < 5 else []
        pts = sorted({m + s * (k + 2 * s) for m, s, _ in ends for k in (-20, -8, -3, 0, 3, 8, 20)})
        mean = quad(lambda x: exp(x) * self.density(x), pts, maxdegree=7)
        var = quad(lambda x: (exp(x) - mean) ** 2 * self.density(x), pts, maxdegree=7)
        return mean, sqrt(var)


def digits(x):
    return nstr(x, 25)


def bank(n, lo, hi, sd, mean=0.0, shift=0.0):
    """Nodes as of a repeatability that is learned: equidistant in its logarithm."""
    logs = [-0.5 * ((i - (n - 1) / 2) / (n / 6)) ** 2 for i in range(n)]
    parts = [(mean + shift * (i - n / 2), sd * 10 ** (lo + (hi - lo) * i / (n - 1)), 0) for i in range(n)]
    return logs, parts


rng = random.Random(7)
CASES = {
    "two": ([0.0, -1.0], [(1.0, 0.5, 0), (1.5, 0.25, 0)]),
    "bank of 17": bank(17, -0.4, 0.4, 0.02, 0.8, 0.0003),
    "bank of 60, wide": bank(60, -1, 3, 0.02, 0.8, 0.001),
    "far apart and narrow": ([-3.0, 0.0, -2.0], [(-7.0, 1e-6, 0), (0.0, 1e-3, 0), (5.0, 1e-2, 0)]),
    "a part of hardly any weight": ([0.0, -600.0], [(0.0, 1.0, 0), (3.0, 1e6, 0)]),
    "large beside its spread": ([0.0, -0.7, 0.2], [(1e9, 1.0, 0), (1e9 + 0.25, 1.5, 0), (1e9 - 0.375, 0.75, 0)]),
    "minute": ([5.0, 6.0], [(1e-100, 1e-100, 0), (2e-100, 3e-100, 0)]),
    "huge": ([5.0, 6.0], [(1e99, 1e98, 0), (-2e99, 3e97, 0)]),
    "student": ([0.0, 0.5], [(0.25, 0.5, 3), (0.5, 0.125, 7)]),
    "student without moments": ([0.0, 0.5, -1.0], [(0.25, 0.5, 1), (0.5, 0.125, 2), (0.75, 0.25, 0)]),
    "random": ([rng.uniform(-20, 0) for _ in range(24)], [(rng.gauss(0, 1), 10 ** rng.uniform(-2, 1), 0) for _ in range(24)]),
    "loose in X": ([0.0, -0.5], [(-1.0, 2.0, 0), (2.0, 3.0, 0)]),
}

if __name__ == "__main__":
    out = []
    for name, (logs, parts) in CASES.items():
        b = Blend(logs, parts)
        s0 = max(p[1] for p in parts)
        mean, sd = b.moments()
        case = {"name": name, "log_weights": logs, "parts": parts, "tails": [], "between": [], "quantiles": [], "exponential_tails": []}
        if sd is not None:
            anchor = max(zip(logs, parts))[1][0]
            case |= {"anchor": anchor, "mean_offset": digits(mean - mpf(anchor)), "sd": digits(sd)}
        points = sorted({float(m + k * s) for m, s, _ in parts[:: max(1, len(parts) // 4)] for k in (-35, -9, -3, -0.5, 0, 0.7, 2, 6, 20, 36)})
        for x in points:
            lo, up = b.upper(mpf(x), -1), b.upper(mpf(x))
            case["tails"].append((x, digits(lo), digits(up)))
            if abs(x) < 600:
                e = float(exp(mpf(x)))
                case["exponential_tails"].append((e, digits(b.upper(log(mpf(e)), -1)), digits(b.upper(log(mpf(e))))))
        for x, y in list(zip(points, points[1:])) + [(x, x + 1e-7 * s0) for x in points[::3]]:
            if y > x:
                p = b.between(mpf(x), mpf(y))
                case["between"].append((x, y, digits(p)))
        for p in (1e-250, 1e-40, 1e-9, 0.025, 0.3, 0.5):
            case["quantiles"].append((p, digits(b.quantile(mpf(p)))))
        if name in ("two", "bank of 17", "far apart and narrow", "loose in X", "student"):
            if name == "student":
                case["exponential_mean"], case["exponential_sd"] = "", ""
            else:
                m, s = b.exponential_moments()
                case["exponential_mean"], case["exponential_sd"] = digits(m), digits(s)
        out.append(case)
    with open(os.path.join(HERE, "blend.json"), "w") as f:
        json.dump(out, f, indent=0)
        f.write("\n")
