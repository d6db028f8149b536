"""Reference numbers for engine/posterior, by mpmath with 30 digits and more.

    python3 posterior.py        (Debian: python3-mpmath)

writes normal.csv, student.csv and mixture.json beside itself. Inputs are doubles,
taken exactly; outputs carry 20 digits. The mixtures are computed the other way
round from the package: there the level is integrated out and r is left to
quadrature; here r is integrated out in closed form, which leaves

    p(level) ~ prior(level) * (A + n (level - mean)^2)^(-(worth + n) / 2)

(normal prior times Student likelihood), and the level is left to quadrature.
Given the level, r^2 is scaled inverse chi-squared with worth + n degrees of
freedom. What concerns r and the next indication comes from the integral over
ln r, by Gauss-Legendre to 30 digits.
"""
import csv
import json
import os

from mpmath import (betainc, erfc, erfinv, exp, log, log1p, loggamma, mp, mpf,
                    nstr, pi, quad, sqrt)

mp.dps = 30
HERE = os.path.dirname(os.path.abspath(__file__))


def text(x):
    return nstr(x, 20, min_fixed=1, max_fixed=0)


def write(name, header, rows):
    with open(os.path.join(HERE, name), "w", newline="") as f:
        w = csv.writer(f, lineterminator="\n")
        w.writerow(header)
        w.writerows(rows)


# --- normal -----------------------------------------------------------------

def normal_tail(z):
    return erfc(z / sqrt(mpf(2))) / 2


def normal():
    rows = []
    for mean, sd in ((0.0, 1.0), (0.1, 0.3), (1e9, 0.7), (-5.47, 0.05)):
        for k in (-30, -3, -0.5, 0.0, 1e-9, 0.3, 1.0, 2.7, 5.1, 8.29, 9.0, 12.3,
                  20.9, 26.1, 33.3, 37.0, 37.3):
            x = mean + k * sd
            z = (mpf(x) - mpf(mean)) / mpf(sd)
            rows.append((repr(mean), repr(sd), repr(x), text(normal_tail(z)), text(normal_tail(-z))))
    write("normal.csv", ("mean", "sd", "x", "upper", "lower"), rows)


# --- Student ----------------------------------------------------------------

def student_log_peak(nu):
    return loggamma((nu + 1) / 2) - loggamma(nu / 2) - log(nu * pi) / 2


def student_tail(t, nu):
    if t < 0:
        return 1 - student_tail(-t, nu)
    if nu <= 3000 and t > 1:
        return betainc(nu / 2, mpf(1) / 2, 0, nu / (nu + t * t), regularized=True) / 2
    if t <= 1:
        f = lambda s: exp(-(nu + 1) / 2 * log1p(s * s / nu))
        return mpf(1) / 2 - exp(student_log_peak(nu)) * quad(f, [0, t / 2, t])
    f0 = (nu + 1) / 2 * log1p(t * t / nu)
    slope = (nu + 1) * t / (nu + t * t)
    f = lambda w: exp(f0 - (nu + 1) / 2 * log1p((t + w / slope) ** 2 / nu))
    return exp(student_log_peak(nu) - f0) / slope * quad(f, [0, 1, 3, 8, 20, 50, 120, 300, 800])


def student():
    rows = []
    nus = (0.5, 1.0, 1.5, 2.0, 3.0, 4.7, 10.0, 19.0, 50.0, 199.0, 777.7, 1999.0,
           2000.0, 2500.0, 1e4, 1e6, 1e9)
    for nu in nus:
        for digits in (0.32, 0.5, 1, 1.6, 3, 8, 20, 70, 160, 299):
            target = mpf(10) ** (-digits)
            z = sqrt(mpf(2)) * erfinv(1 - 2 * target) if digits < 30 else sqrt(2 * log(10) * digits)
            bound = exp((student_log_peak(mpf(nu)) - log(target) + (mpf(nu) - 1) / 2 * log(nu)) / nu)
            t = float(min(sqrt(nu * (exp(z * z / nu) - 1)), bound))
            if not 0 < t < 1e150:
                continue
            if text(student_tail(mpf(t), mpf(nu))) == "0.0":
                continue
            rows.append((repr(nu), repr(t), text(student_tail(mpf(t), mpf(nu)))))
    write("student.csv", ("dof", "t", "upper"), rows)


# --- mixtures ---------------------------------------------------------------

class Mixture:
    def __init__(self, case):
        self.m0, self.s0 = case.get("prior", (None, None))
        self.known = [(mpf(y), mpf(u)) for y, u in case.get("known", [])]
        self.y = [(mpf(y), k) for y, k in case["readings"]]
        self.n = sum(k for _, k in self.y)
        self.worth, self.guess = mpf(case["worth"]), mpf(case["guess"])
        self.a = self.worth * self.guess ** 2
        self.mean = mpf(0)
        if self.n:
            self.mean = sum(y * k for y, k in self.y) / self.n
            self.a += sum(k * (y - self.mean) ** 2 for y, k in self.y)
        self.nu = self.worth + self.n
        w = sum(1 / u ** 2 for _, u in self.known)
        wm = sum(y / u ** 2 for y, u in self.known)
        if self.m0 is not None:
            w += 1 / mpf(self.s0) ** 2
            wm += mpf(self.m0) / mpf(self.s0) ** 2
        self.mb, self.sb = wm / w, 1 / sqrt(w)
        sy = sqrt(self.a / self.nu / max(self.n, 1))
        self.width = min(sy, self.sb)
        pts = set()
        for c, s in ((self.mb, self.sb), (self.mean if self.n else self.mb, sy)):
            for k in (-36, -24, -16, -11, -8, -6, -4.5, -3, -2, -1, 0):
                pts.add(c + s * k)
                pts.add(c - s * k)
        between = abs(self.mean - self.mb) if self.n else mpf(0)
        for k in range(1, 12):
            pts.add(self.mb + (self.mean - self.mb) * k / 12 if between else self.mb)
        self.points = sorted(p for p in pts if abs(p - self.mb) <= 37 * self.sb + mpf(0))
        self.points = [self.mb - 45 * self.sb] + self.points + [self.mb + 45 * self.sb]
        self.top = max(self.log_density(p, 0) for p in self.points)
        self.z = self.integrate(lambda t: mpf(1))

    def log_density(self, t, top=None):
        q = -((t - self.mb) / self.sb) ** 2 / 2
        if self.n:
            q -= self.nu / 2 * log(self.a + self.n * (t - self.mean) ** 2)
        return q - (self.top if top is None else top)

    def integrate(self, f, lo=None, hi=None):
        pts = [p for p in self.points if (lo is None or p > lo) and (hi is None or p < hi)]
        if lo is not None:
            pts = [lo] + pts
        if hi is not None:
            pts = pts + [hi]
        return quad(lambda t: exp(self.log_density(t)) * f(t), pts)

    def moments(self):
        if hasattr(self, "kept"):
            return self.kept
        m = self.integrate(lambda t: t - self.mb) / self.z
        v = self.integrate(lambda t: (t - self.mb - m) ** 2) / self.z
        self.kept = self.mb + m, sqrt(v)
        return self.kept

    def tail(self, x, side):
        """P(level > x) for side 1, P(level < x) for side -1."""
        mid, sd = self.moments()
        if (x - mid) * side < 0:
            return 1 - self.tail(x, -side)
        h = mpf(10) ** -12 * self.width
        slope = abs(self.log_density(x + h) - self.log_density(x - h)) / (2 * h)
        step = min(sd, 1 / slope)
        pts = [x] + [x + side * step * k for k in (0.5, 1, 2, 3.5, 5, 8, 12, 18, 26, 40, 60, 90)]
        reach = max(45 * self.sb, abs(x - self.mb) * 2)
        pts += [p for p in self.points if (p - x) * side > 0 and (p - pts[-1]) * side > 0]
        if (self.mb + side * reach - pts[-1]) * side > 0:
            pts.append(self.mb + side * reach)
        pts = sorted(pts)
        base = self.log_density(x)
        big = max([self.log_density(p) for p in pts] + [base])
        return exp(big) * quad(lambda t: exp(self.log_density(t) - big), pts) / self.z

    def log_r(self, u):
        """ln of the density of u = ln r, the level integrated out."""
        k = self.worth + max(self.n - 1, 0)
        q = -k * u - self.a / 2 * exp(-2 * u)
        if self.n:
            v = self.sb ** 2 + exp(2 * u) / self.n
            q -= log(v) / 2 + (self.mean - self.mb) ** 2 / v / 2
        return q

    def over_r(self, log_f, hi=None):
        """ln of the integral of exp(log_r + log_f) over u, up to hi."""
        h = lambda u: self.log_r(u) + log_f(u)
        grid = [mpf(i) / 16 - 16 for i in range(16 * 60)]
        if hi is not None:
            grid = [g for g in grid if g < hi] + [hi]
        v = [h(g) for g in grid]
        i = max(range(len(v)), key=lambda j: v[j])
        lo, up = grid[max(i - 1, 0)], grid[min(i + 1, len(v) - 1)]
        for _ in range(40):
            a, b = lo + (up - lo) * mpf(0.382), lo + (up - lo) * mpf(0.618)
            lo, up = (lo, b) if h(a) > h(b) else (a, up)
        top = (lo + up) / 2
        high = h(top)
        width = mpf(0.3)
        while high - min(h(top - width), h(top + width) if hi is None else mpf(10) ** 9) > 2:
            width *= mpf(0.8)
        inside = [g for g, w in zip(grid, v) if w > high - 62] or [top]
        begin, end = min(inside[0], top), max(inside[-1], top)
        begin -= mpf(1) / 16
        end = hi if hi is not None else end + mpf(1) / 16
        while (end - begin) > 400 * width:
            # a narrow peak: what lies 30 widths from it is below 1e-60
            begin, end = max(begin, top - 30 * width), min(end, top + 30 * width)
        n = int((end - begin) / (2 * width)) + 2
        pts = [begin + (end - begin) * j / n for j in range(n + 1)]
        return high + log(quad(lambda u: exp(h(u) - high), pts, method="gauss-legendre"))

    def next_tail(self, x, side):
        """P(next > x): normal given r, r left to quadrature."""
        def log_f(u):
            r2 = exp(2 * u)
            w = 1 / self.sb ** 2 + self.n / r2
            m = self.mb + (self.mean - self.mb) * (self.n / r2) / w
            z = side * (x - m) / sqrt(1 / w + r2)
            return log(erfc(z / sqrt(mpf(2))) / 2)
        return exp(self.over_r(log_f) - self.total())

    def total(self):
        if not hasattr(self, "log_total"):
            self.log_total = self.over_r(lambda u: mpf(0))
        return self.log_total

    def r_below(self, q):
        return exp(self.over_r(lambda u: mpf(0), hi=log(q)) - self.total())


CASES = [
    dict(name="readings above a firm prior", prior=(0.80, 0.02), worth=4, guess=0.02,
         readings=[(0.95, 1), (1.00, 1), (0.93, 1)], at=[0.75, 0.80, 0.90, 1.0, 1.5]),
    dict(name="reference prior", prior=(0.80, 0.05), worth=0, guess=0,
         readings=[(0.83, 1), (0.79, 1), (0.84, 1)], at=[0.5, 0.7, 0.82, 0.9, 2.5]),
    dict(name="one reading", prior=(-21.0, 1.5), worth=4, guess=0.3,
         readings=[(-20.2, 1)], at=[-30, -22, -20.3, -19, -10]),
    dict(name="two modes", prior=(0.0, 0.05), worth=0, guess=0,
         readings=[(1.0, 1), (1.02, 1), (0.98, 1), (1.01, 1)], at=[-0.3, 0.02, 0.5, 0.97, 1.1]),
    dict(name="large value", prior=(1e9, 1.0), worth=2, guess=0.5,
         readings=[(1e9 + 0.25, 1), (1e9 + 0.75, 1), (1e9 - 0.5, 1)], at=[1e9 - 5, 1e9 + 0.1, 1e9 + 2, 1e9 + 20]),
    dict(name="many readings", prior=(5.0, 0.001), worth=3, guess=0.1,
         readings=[(5.0, 40000), (5.25, 20000), (4.75, 20100)], at=[4.99, 4.9995, 5.0, 5.001, 5.02]),
    dict(name="wide prior", prior=(0.0, 1e6), worth=0, guess=0,
         readings=[(101, 1), (100.5, 1), (101.5, 1), (100.75, 1)], at=[90, 100.9, 102, 1e4, 1e6]),
    dict(name="narrow prior", prior=(3.0, 1e-6), worth=1, guess=1.0,
         readings=[(2.5, 1), (3.5, 1), (4.0, 1)], at=[2.99997, 3.0, 3.000001, 3.00003]),
    dict(name="own uncertainties on a vague prior", worth=0, guess=0,
         known=[(4.1, 0.2), (3.9, 0.1)], readings=[(4.4, 1), (4.3, 1), (4.45, 1)], at=[3, 3.9, 4.2, 4.6, 6]),
    dict(name="half a degree of freedom", prior=(10.0, 2.0), worth=0.5, guess=0.1,
         readings=[(12.0, 1)], at=[-20, 8, 11.9, 12.5, 40]),
    dict(name="no reading", prior=(10.0, 2.0), worth=3, guess=1.0,
         readings=[], at=[4, 9, 11, 20]),
]


def mixtures():
    out = []
    for case in CASES:
        m = Mixture(case)
        mean, sd = m.moments()
        c = {k: v for k, v in case.items() if k != "at"}
        c["mean_offset_from_first"] = text(mean - mpf(case["at"][0]))
        c["sd"] = text(sd)
        c["tails"] = [dict(x=x, upper=text(m.tail(mpf(x), 1)), lower=text(m.tail(mpf(x), -1)),
                           next_upper=text(m.next_tail(mpf(x), 1)), next_lower=text(m.next_tail(mpf(x), -1)))
                      for x in case["at"]]
        rs = [float(sqrt(m.a / m.nu)) * k for k in (0.7, 1.0, 1.6, 3.0)]
        c["r_below"] = [dict(r=r, probability=text(m.r_below(mpf(r)))) for r in rs]
        out.append(c)
    with open(os.path.join(HERE, "mixture.json"), "w") as f:
        json.dump(out, f, indent=1)
        f.write("\n")


if __name__ == "__main__":
    normal()
    student()
    mixtures()
