"""Upper quantiles of chi-squared, by mpmath with 40 digits: for engine/posterior.

    python3 chisquared.py        (Debian: python3-mpmath)

writes chisquared.csv beside itself: dof, p and the x with P(X > x) = p, the root
of the regularised upper incomplete gamma function Q(dof/2, x/2) - p.
"""
import csv
import os

from mpmath import findroot, gammainc, log, mp, mpf, nstr

mp.dps = 40
HERE = os.path.dirname(os.path.abspath(__file__))


def upper(x, dof):
    return gammainc(mpf(dof) / 2, mpf(x) / 2, regularized=True)


def quantile(p, dof):
    # Bisection on the logarithm, which can't leave the domain, then a secant.
    lo, hi = mpf(10) ** -400, mpf(dof) * 40 + 400
    for _ in range(60):
        mid = mp.sqrt(lo * hi)
        lo, hi = (mid, hi) if upper(mid, dof) > p else (lo, mid)
    root = findroot(lambda u: upper(mp.exp(u), dof) - p, (log(lo), log(hi)), solver="anderson", tol=1e-60)
    return mp.exp(root)


with open(os.path.join(HERE, "chisquared.csv"), "w", newline="") as f:
    w = csv.writer(f, lineterminator="\n")
    w.writerow(("dof", "p", "x"))
    for dof in (0.25, 1, 1.5, 2, 3, 4.5, 10, 99, 1000, 12345.5):
        for p in (0.0005, 0.025, 0.25, 0.5, 0.75, 0.975, 0.9995):
            w.writerow((repr(dof), repr(p), nstr(quantile(mpf(p), mpf(dof)), 20, min_fixed=1, max_fixed=0)))
