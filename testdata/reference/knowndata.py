"""What a check of the model has to say of published data, by NumPy, SciPy and mpmath.

    python3 knowndata.py        (Debian: python3-scipy, python3-mpmath)

writes knowndata.json beside itself: for each case the readings' normal scores under
their one-step predictives, summed up; the tests of the last full window; the steps of a two-sided
CUSUM; and for known repeatabilities the best log-likelihoods of a moving level and of
correlated noise. Predictives are Student's for a level that stays, else of a Kalman filter,
summed over 6000 values of ln r where r is learned; likelihoods are of the dense covariance of all readings.
"""
import csv
import functools
import json
import os

import numpy as np
from mpmath import mp
from scipy import stats
from scipy.optimize import brentq, minimize

from modelcheck import serial

HERE = os.path.dirname(os.path.abspath(__file__))
DAY, YEAR, GREGORIAN = 86400.0, 365.25 * 86400, 31556952.0


def column(name, head):
    with open(os.path.join(HERE, "..", "published", name + ".csv")) as f:
        rows = list(csv.reader(line for line in f if not line.startswith("#")))
    return np.array([float(r[rows[0].index(head)]) for r in rows[1:]])


def beaver(name):
    day, clock = column(name, "day"), column(name, "time")
    return column(name, "temp"), day * DAY + clock // 100 * 3600 + clock % 100 * 60


def every(values, step):
    return values, np.arange(len(values)) * step


def score(below, above):
    return stats.norm.ppf(below) if below <= above else stats.norm.isf(above)


def student(y):
    """Scores of a constant of which nothing is known, r by 1/r: Student, n - 1 degrees of freedom."""
    for n in range(2, len(y)):
        mean, s = y[:n].mean(), y[:n].std(ddof=1)
        t = (y[n] - mean) / (s * np.sqrt(1 + 1 / n))
        yield n, score(stats.t.cdf(t, n - 1), stats.t.sf(t, n - 1))


def filtered(y, t, r, weight, walk, widen, unscored, threshold):
    """Scores under a Kalman filter from nothing at every r, and whether each found a step."""
    r2, logw = r * r, np.log(weight)
    mean, var = np.full(len(r), y[0]), r2.copy()
    up = down = 0.0
    for n in range(1, len(y)):
        var = var + walk * (t[n] - t[n - 1])
        f = var + r2
        if n >= unscored:
            w = np.exp(logw - logw.max())
            w /= w.sum()
            d = (y[n] - mean) / np.sqrt(f)
            z = score(w @ stats.norm.cdf(d), w @ stats.norm.sf(d))
            yield n, z
        logw = logw - np.log(f) / 2 - (y[n] - mean) ** 2 / f / 2
        mean, var = mean + var / f * (y[n] - mean), var * r2 / f
        if n >= unscored:
            c = max(-8, min(8, z))
            up, down = max(0, up + c - 0.5), max(0, down - c - 0.5)
            if max(up, down) > threshold:
                up = down = 0.0
                var = var + widen * widen


def run_length(h):
    """Of the two-sided CUSUM with k = 1/2: Page's integral equation at 120 Gauss-Legendre nodes."""
    x, w = np.polynomial.legendre.leggauss(120)
    x, w = np.append((x + 1) * h / 2, 0), np.append(w * h / 2, 0)
    a = -w * stats.norm.pdf(x[None, :] + 0.5 - x[:, None])
    a[:, -1] = -stats.norm.cdf(0.5 - x)
    return np.linalg.solve(np.eye(len(x)) + a, np.ones(len(x)))[-1] / 2


def threshold(interval):
    return brentq(lambda h: np.log(run_length(h) / interval), 1, 25, xtol=1e-10)


def steps(scores, h):
    """Page's CUSUM: index of the reading that finds a step, of the last one before the sum rose, and direction."""
    found, up, down = [], 0.0, 0.0
    since_up = since_down = 0
    for n, z in scores:
        c = max(-8, min(8, z))
        up, down = max(0, up + c - 0.5), max(0, down - c - 0.5)
        since_up, since_down = n if up == 0 else since_up, n if down == 0 else since_down
        if max(up, down) > h:
            found.append({"at": n, "since": since_up if up > h else since_down, "direction": "UP" if up > h else "DOWN"})
            up = down = 0.0
            since_up = since_down = n
    return found


@functools.cache
def serial_probability(n, r):
    mp.dps = 28 + int(-n / 2 * np.log10(1 - r * r))  # twenty digits of it
    return float(serial(n, r))


def tests(scores, t, window, objections):
    """The tests of the last full window and what they object to."""
    looks = len(scores) // window
    if looks == 0:
        return {"result": "TOO_FEW", "objections": []}
    part = scores[(looks - 1) * window : looks * window]
    began = t[0] if looks == 1 else t[scores[(looks - 1) * window - 1][0]]
    z = np.array([s for _, s in part])
    level = min(0.01, objections * (t[part[-1][0]] - began) / YEAR) / 4
    square, lag = (z * z).sum(), (z[1:] * z[:-1]).sum() / (z * z).sum()
    p = {
        "INTERVALS_TOO_NARROW": stats.chi2.sf(square, window),
        "INTERVALS_TOO_WIDE": stats.chi2.cdf(square, window),
        "SERIAL": serial_probability(window, round(abs(lag), 9)),
    }
    objecting = sorted((o for o in p if p[o] < level), key=lambda o: p[o])
    return {
        "result": objecting[0] if objecting else "NO_OBJECTION", "objections": objecting,
        "square": square, "lag_1": lag, "level": level, "probabilities": [p["INTERVALS_TOO_NARROW"], p["INTERVALS_TOO_WIDE"], p["SERIAL"]],
    }


def log_likelihood(y, v):
    """ln of the density of y with covariance v, integrated over a flat level."""
    try:
        low = np.linalg.cholesky(v)
    except np.linalg.LinAlgError:
        return -1e300  # a variance so large that rounding leaves nothing else
    a, b = np.linalg.solve(low, y), np.linalg.solve(low, np.ones(len(y)))
    m = (a @ b) / (b @ b)
    return -((len(y) - 1) * np.log(2 * np.pi) + 2 * np.log(np.diag(low)).sum() + np.log(b @ b) + ((a - m * b) ** 2).sum()) / 2


def best(f, starts):
    fits = [minimize(lambda p: -f(p), s, method="Nelder-Mead", options={"xatol": 1e-7, "fatol": 1e-10, "maxiter": 900, "maxfev": 900}) for s in starts]
    fit = min(fits, key=lambda o: o.fun)
    return -fit.fun, np.exp(fit.x)


def explanation(y, t, r, walk):
    """Of readings with white noise r, or if that is None, fitted."""
    one, t = np.eye(len(y)), t - t[0]
    moved, apart = np.minimum.outer(t, t), np.abs(np.subtract.outer(t, t))
    # The correlation time from a tenth of the shortest step to ten times the whole time, as its
    # ends mean white noise and a walk; r not below a thousandth of the scatter.
    ends = np.log(np.diff(t).min() / 10), np.log(10 * t[-1])
    time = lambda x: np.exp(np.clip(x, *ends))
    scatter = y.std(ddof=1)
    white = lambda p: (r or max(np.exp(p[-1]), scatter / 1000)) ** 2 * one
    free = [] if r else [np.log(scatter / 2)]  # where the search for r starts
    scale = np.log(r or scatter)
    declared, _ = best(lambda p: log_likelihood(y, white(p) + walk * moved), [free or [0.0]])
    moving, m = best(
        lambda p: log_likelihood(y, white(p) + np.exp(2 * p[0]) * moved / DAY),
        [[scale + k] + free for k in (-2, 1)],
    )
    noise, c = best(
        lambda p: log_likelihood(y, white(p) + walk * moved + np.exp(2 * p[0]) * np.exp(-apart / time(p[1]))),
        [[scale, np.log(k * t[1])] + free for k in (0.7, 6, 60)],
    )
    return {
        "as_declared": declared, "moving": moving, "per_day": m[0],
        "correlated": noise, "sd": c[0], "correlation_time": time(np.log(c[1])),
    }


CASES = []


def case(name, data, r=None, guess=None, worth=None, walk=0.0, widen=0.0, window=64, objections=1e-3, interval=1e6, explain=False):
    y, t = data
    h = threshold(interval)
    if r is None and guess is None and walk == 0 and widen == 0:
        scores = list(student(y))
    else:
        grid, weight, unscored = np.array([r or 0.0]), np.ones(1), 1
        if r is None:
            x = np.log(y.std(ddof=1)) + np.linspace(-9, 31, 6000)
            grid, weight, unscored = np.exp(x), np.ones(6000), 2
            if guess is not None:  # r^2 is scaled inverse chi-squared: its density in ln r
                weight, unscored = np.exp(worth * (np.log(guess) - x) - worth * guess**2 / np.exp(2 * x) / 2) + 1e-320, 1
        scores = list(filtered(y, t, grid, weight, walk, widen, unscored, h))
    z = np.array([s for _, s in scores])
    out = {
        "name": name, "scored": len(z), "mean_square": (z * z).mean(),
        "coverage_50": (abs(z) < stats.norm.ppf(0.75)).mean(), "coverage_95": (abs(z) < stats.norm.ppf(0.975)).mean(),
        "threshold": h, "steps": steps(scores, h), **tests(scores, t, window, objections),
    }
    if explain:
        last = len(scores) // window * window
        part = slice(scores[last - window][0], scores[last - 1][0] + 1)
        out["explanation"] = explanation(y[part], t[part], r, walk)
    CASES.append(out)
    print(out)


if __name__ == "__main__":
    for name in ("lew", "lottery", "mavro", "michelso", "numacc1", "numacc2", "numacc3", "numacc4", "pidigits"):
        case(name, every(column("strd_" + name, "value"), DAY), explain=name == "michelso")
    case("lew, window 198", every(column("strd_lew", "value"), DAY), window=198)
    case("mavro, window 48", every(column("strd_mavro", "value"), DAY), window=48)
    michelson = column("strd_michelso", "value")
    case("michelso, a minute", every(michelson, 60.0))
    case("michelso, known", every(michelson, DAY), r=0.0742, window=99, explain=True)

    case("newcomb", every(column("newcomb", "newcomb"), DAY))

    nile = every(column("nile", "flow_1e8_m3"), GREGORIAN)
    r, q = np.sqrt(15099), 1469.1 / GREGORIAN
    for interval in (100, 1e4, 1e6):
        case("nile, constant, %g" % interval, nile, interval=interval)
        case("nile, walk, %g" % interval, nile, r=r, walk=q, interval=interval)
        case("nile, widened, %g" % interval, nile, widen=300.0, interval=interval)
    case("nile, known", nile, r=r, window=99, explain=True)

    for name in ("beaver1", "beaver2"):
        data = beaver(name)
        for interval in (1e4, 1e6):
            case(name + ", constant, %g" % interval, data, interval=interval)
            for sd in (0.1, 0.2):
                case(name + ", walk %g, %g" % (sd, interval), data, guess=0.05, worth=4.0, walk=sd * sd / 3600, interval=interval)
        case(name + ", known", data, r=0.05, walk=0.1**2 / 3600, window=len(data[0]) - 1, explain=True)

    with open(os.path.join(HERE, "knowndata.json"), "w") as f:
        json.dump(CASES, f, indent=1, default=float)
        f.write("\n")
