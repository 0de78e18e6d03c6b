"""Reads one JSON list of data sets from standard input, fits each by SciPy and prints JSON.

With the argument "time" it prints instead the processor seconds per fit of the fastest optimiser,
started from the values given with the set.
"""
import json, sys, time
import numpy as np
from scipy.optimize import minimize
from scipy.special import ndtr, expit

F = {
    "gumbel": lambda u: -np.expm1(-np.power(10, np.minimum(u, 300))),
    "logistic": expit,
    "gaussian": ndtr,
    "sech": lambda u: 2 / np.pi * np.arctan(np.exp(np.pi / 2 * np.minimum(u, 400))),
}


def problem(s):
    z, n, k = (np.array(s[c], float) for c in "znk")
    f, g, lapse = F[s["shape"]], s["guess"], s["lapse"]

    def loss(t):
        l = t[2] if len(t) > 2 else lapse
        p = np.clip(g + (1 - g - l) * f(np.exp(t[1]) * (z - t[0])), 1e-15, 1 - 1e-15)
        return -(k * np.log(p) + (n - k) * np.log1p(-p)).sum()

    return loss


def fit(s):
    loss = problem(s)
    bounds = [(-20, 20), (-6, 9)] + ([(0, s["lapse_max"])] if s["free"] else [])
    best = None
    for a in (-0.2, 0.0, 0.2):
        for b in (0.5, 1.2):
            for l in (0.01, 0.06):
                start = [s["start"][0] + a, s["start"][1] + b - 0.8] + ([l] if s["free"] else [])
                r = minimize(loss, start, method="L-BFGS-B", bounds=bounds)
                if best is None or r.fun < best.fun:
                    best = r
    for _ in range(3):
        r = minimize(loss, best.x, method="Nelder-Mead", bounds=bounds,
                     options=dict(xatol=1e-10, fatol=1e-14, maxfev=4000))
        if r.fun < best.fun:
            best = r
    return {"theta": list(best.x), "log_likelihood": -best.fun}


def timed(s):
    loss, start = problem(s), s["start"][:2] + ([0.02] if s["free"] else [])
    bounds = [(-20, 20), (-6, 9)] + ([(0, s["lapse_max"])] if s["free"] else [])
    fastest = np.inf
    for method in ("BFGS", "L-BFGS-B", "Nelder-Mead"):
        options = {} if method == "BFGS" else {"bounds": bounds}
        if method == "BFGS" and s["free"]:
            continue  # knows no bounds
        for _ in range(5):
            t = time.process_time()
            for _ in range(20):
                minimize(loss, start, method=method, **options)
            fastest = min(fastest, (time.process_time() - t) / 20)
    return {"seconds": fastest}


work = timed if "time" in sys.argv else fit
np.seterr(all="ignore")
json.dump([work(s) for s in json.load(sys.stdin)], sys.stdout)
