"""Accounts of readings that err alike, by NumPy and SciPy: for engine/modelcheck.

    python3 explain.py        (Debian: python3-scipy)

writes explain.json beside itself: for each case the readings, and for the level as it is
declared, a level that moves and a correlated noise the greatest log-likelihood and where it
is. Likelihoods are of the dense covariance of all readings, the level at the first one
integrated out. Where r is learned it is fitted along, from a thousandth of the root mean
square of half the differences of neighbours that have it; what was guessed of it takes off
worth (ln(r / guess) + ((guess / r)^2 - 1) / 2). Maxima are looked for by differential evolution,
then by a simplex, from several seeds.
"""
import csv
import json
import os

import numpy as np
from scipy.linalg import LinAlgError, cho_solve, cholesky
from scipy.optimize import differential_evolution, minimize

HERE = os.path.dirname(os.path.abspath(__file__))
DAY, YEAR = 86400.0, 31556952.0


def column(name, head):
    with open(os.path.join(HERE, "..", "published", name + ".csv")) as f:
        rows = list(csv.reader(line for line in f if not line.startswith("#")))
    return np.array([float(r[rows[0].index(head)]) for r in rows[1:]])


def log_likelihood(y, v):
    try:
        low = (cholesky(v, lower=True), True)
    except LinAlgError:
        return -np.inf
    one = np.ones(len(y))
    inverse = cho_solve(low, np.column_stack([one, y]))
    weight = one @ inverse[:, 0]
    d = y - (one @ inverse[:, 1]) / weight
    return -((len(y) - 1) * np.log(2 * np.pi) + 2 * np.log(np.diag(low[0])).sum() + np.log(weight) + d @ cho_solve(low, d)) / 2


def best(f, box):
    """Where f is greatest in a box."""
    if not box:
        return f([]), np.array([])
    lo, hi = np.array(box).T
    inside = lambda x: -f(np.clip(x, lo, hi))
    found = None
    for seed in (1, 2):
        start = differential_evolution(inside, box, seed=seed, popsize=20, maxiter=120, tol=1e-9, polish=False).x
        for _ in range(2):
            fit = minimize(inside, start, method="Nelder-Mead", options={"xatol": 1e-8, "fatol": 1e-10, "maxiter": 4000})
            start = fit.x
        if found is None or -fit.fun > found[0]:
            found = -fit.fun, np.clip(fit.x, lo, hi)
    return found


CASES = []


def case(name, seconds, value, variance, learned, walk=0.0, guess=0.0, worth=0.0, floor=0.0):
    n = len(value)
    t, y = np.asarray(seconds, float), np.asarray(value, float)
    variance, learned = np.broadcast_to(variance, n).astype(float), np.broadcast_to(learned, n).astype(float)
    z = y - y[0]
    since = t - t[0]
    moved, apart = np.minimum.outer(since, since), np.abs(np.subtract.outer(t, t))
    scale = 1.0
    white = []  # box of ln r
    if learned.any():
        d = np.diff(y[learned > 0])
        scale = np.sqrt((d * d).mean() / 2 / learned.max())
        white = [(np.log(max(floor, scale / 1000)), np.log(10 * (np.abs(z).max() + scale + guess)))]

    def density(r, walk, v, seconds):
        total = np.diag(variance + learned * r * r) + walk * moved
        if v > 0:
            total = total + v * np.exp(-apart / seconds)
        out = log_likelihood(z, total)
        if worth > 0:
            out -= worth * (np.log(r / guess) + ((guess / r) ** 2 - 1) / 2)
        return out

    r = lambda x: np.exp(x[-1]) if white else 1.0
    span, shortest = since[-1], np.diff(t)[np.diff(t) > 0].min()
    largest = np.log(np.abs(z).max() ** 2 + variance.max())
    noise = (np.log(scale * scale) - 14, largest + 2)
    declared, d = best(lambda x: density(r(x), walk, 0, 1), white)
    stays, s = best(lambda x: density(r(x), 0, 0, 1), white)
    moving, m = best(lambda x: density(r(x), np.exp(x[0]), 0, 1), [(noise[0] - np.log(span), noise[1] - np.log(shortest))] + white)
    correlated, c = best(lambda x: density(r(x), walk, np.exp(x[1]), np.exp(x[0])), [(np.log(shortest / 10), np.log(10 * span)), noise] + white)
    fitted = lambda x: float(np.exp(x[-1])) if white else 0.0
    out = {
        "name": name, "walk": walk, "guess": guess, "worth": worth, "floor": floor,
        "seconds": t.tolist(), "value": y.tolist(), "variance": variance.tolist(), "learned": learned.tolist(),
        "declared": {"log_likelihood": declared, "r": fitted(d)},
        "stays": {"log_likelihood": stays, "r": fitted(s)},
        "moving": {"log_likelihood": moving, "r": fitted(m), "walk": float(np.exp(m[0]))},
        "correlated": {"log_likelihood": correlated, "r": fitted(c), "sd": float(np.exp(c[1] / 2)), "seconds": float(np.exp(c[0]))},
    }
    CASES.append(out)
    print({k: v for k, v in out.items() if k not in ("seconds", "value", "variance", "learned")}, flush=True)


if __name__ == "__main__":
    michelson = column("strd_michelso", "value")
    days = np.arange(100) * DAY
    case("michelson", days, michelson, 0, 1)
    case("michelson, readings 3 to 66", days[2:66], michelson[2:66], 0, 1)
    case("michelson, displayed to 0.1", days, michelson, 0.1**2 / 12, 1)
    case("michelson, a guess of worth 30", days, michelson, 0, 1, guess=0.05, worth=30)
    case("michelson, a floor", days, michelson, 0, 1, floor=0.06)
    case("michelson, every third known", days, michelson, np.where(np.arange(100) % 3 == 0, 0.05**2, 0), np.where(np.arange(100) % 3 == 0, 0, 1))

    flow = column("nile", "flow_1e8_m3")
    years = np.arange(100) * YEAR
    case("nile", years, flow, 0, 1)
    case("nile, walking", years, flow, 0, 1, walk=1469.1 / YEAR)
    case("nile, means of 1 to 4", years, flow, 0, 1 / (1 + np.arange(100) % 4))
    case("nile, known", years, flow, 15099, 0)

    temperature, clock = column("beaver1", "temp"), column("beaver1", "time")
    at = column("beaver1", "day") * DAY + clock // 100 * 3600 + clock % 100 * 60
    case("beaver1", at, temperature, 0, 1)

    with open(os.path.join(HERE, "explain.json"), "w") as f:
        json.dump(CASES, f, indent=None, separators=(",", ":"))
        f.write("\n")
