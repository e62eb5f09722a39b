#!/usr/bin/python3
"""Recomputes with NumPy, SciPy and statsmodels what crosscheck prints, and compares.

    go run ./testdata/published/crosscheck | /usr/bin/python3 testdata/published/crosscheck.py

Prints the worst relative difference of each quantity over its random cases and exits 1 where one is beyond its limit. The
difference is the greatest over a case's numbers, relative to the greatest of them. Debian: python3-scipy, python3-statsmodels.
"""
import json
import sys
import warnings

import numpy as np
from scipy import linalg, signal, stats
from statsmodels.api import OLS
from statsmodels.stats.diagnostic import acorr_ljungbox
from statsmodels.stats.proportion import proportion_confint
from statsmodels.tsa.stattools import acf

warnings.simplefilter("ignore")


def pairs(z):
    z = np.asarray(z, complex)
    return np.column_stack([z.real, z.imag]).ravel()


def response(c):
    s = 1j * np.array(c["w"])
    return pairs(np.polyval(c["num"][::-1], s) / np.polyval(c["den"][::-1], s) * np.exp(-s * c["delay"]))


def coefficients(method):
    """Powers of z^-1 from the library's descending powers of z."""

    def sample(c):
        num, den, _ = signal.cont2discrete((c["num"][::-1], c["den"][::-1]), c["h"], method)
        num = np.ravel(num)
        return np.concatenate([np.zeros(len(den) - len(num)), num, den])

    return sample


def delayed(c):
    """The hold with delay: the input's change falls between two samples, each part through the matrix exponential."""
    a, b, cc, _ = signal.tf2ss(c["num"][::-1], c["den"][::-1])
    h, n = c["h"], len(a)
    whole, rest = divmod(c["delay"], h)

    def held(t):
        e = linalg.expm(np.block([[a, b], [np.zeros((1, n + 1))]]) * t)
        return e[:n, :n], e[:n, n:]

    phi, both = held(h)
    # The old input acts for rest, then the new one.
    late, new = held(h - rest)
    old = late @ held(rest)[1]
    out = []
    for w in c["w"]:
        z = np.exp(1j * w * h)
        out.append((cc @ np.linalg.solve(z * np.eye(n) - phi, new + old / z))[0, 0] * z ** -whole)
    return pairs(out)


def roots(c):
    return pairs(sorted(np.roots(c["p"][::-1]), key=lambda z: (z.real, z.imag)))


def riccati(solve, gain):
    def f(c):
        a, b, q, r = (np.array(c[k]) for k in "abqr")
        x = solve(a, b, q, r)
        return np.concatenate([x.ravel(), gain(a, b, r, x).ravel()])

    return f


def sampled_noise(c):
    """Van Loan's block exponential."""
    a, q, h = np.array(c["a"]), np.array(c["q"]), c["h"]
    n = len(a)
    e = linalg.expm(np.block([[-a, q], [np.zeros((n, n)), a.T]]) * h)
    return (e[n:, n:].T @ e[:n, n:]).ravel()


def spectra(c):
    def density(x, y):
        return signal.csd(x, y, 1 / c["h"], "hann", c["length"], c["length"] // 2, detrend="constant")[1]

    x, y = np.array(c["x"]), np.array(c["y"])
    return np.concatenate([density(x, x).real, density(y, y).real, pairs(density(x, y))])


def coherence(c):
    return signal.coherence(c["x"], c["y"], 1, "hann", c["length"], c["length"] // 2, detrend="constant")[1][1:]


def multiple_coherence(c):
    def csd(x, y):
        return signal.csd(c[x], c[y], 1, "hann", c["length"], c["length"] // 2, detrend="constant")[1][1:]

    inputs = np.array([[csd(i, j) for j in "ab"] for i in "ab"]).transpose(2, 0, 1)
    cross = np.array([csd(i, "y") for i in "ab"]).T
    explained = np.einsum("ki,ki->k", cross.conj(), np.linalg.solve(inputs, cross[..., None])[..., 0])
    return explained.real / csd("y", "y").real


def ols(part):
    return lambda c: np.ravel(part(OLS(np.array(c["y"]), np.array(c["x"])).fit()))


def arx(c):
    u, y, na, nb = np.array(c["u"]), np.array(c["y"]), c["na"], c["nb"]
    n = max(na, nb)
    x = [-y[n - i : len(y) - i] for i in range(1, na + 1)] + [u[n - i : len(u) - i] for i in range(1, nb + 1)]
    m = OLS(y[n:], np.column_stack(x + [np.ones(len(y) - n)])).fit()
    return np.concatenate([m.params, m.cov_params()[:-1, :-1].ravel()])


def ljung_box(c):
    t = acorr_ljungbox(np.array(c["x"]), lags=[c["lags"]], model_df=2)
    return [t["lb_stat"].iloc[0], t["lb_pvalue"].iloc[0]]


def f_test(c):
    f = (c["rss0"] - c["rss1"]) / c["extra"] / (c["rss1"] / c["df"])
    return [f, stats.f.sf(f, c["extra"], c["df"])]


def clopper_pearson(c):
    lo, hi = proportion_confint(c["k"], c["n"], 2 * (1 - c["confidence"]), "beta")
    return [0 if c["k"] == 0 else lo, 1 if c["k"] == c["n"] else hi]


# Limits: some hundred roundings, more where the comment says why.
REFERENCE = {
    "frequency response": (response, 1e-13),
    "sampled by a hold, coefficients": (coefficients("zoh"), 1e-12),
    # Coefficients in powers of z - 1 serve fast sampling. A pole that grows fourfold a sample costs them four digits: in the
    # worst case here 50-digit arithmetic puts them off by 1.4e-11 and the reference by 2e-15.
    "sampled by a hold with delay, response": (delayed, 1e-10),
    "the same by state space": (delayed, 1e-12),
    "Tustin's transform": (coefficients("bilinear"), 1e-12),
    "difference equation": (lambda c: signal.lfilter(c["num"], c["den"], c["x"]), 1e-13),
    "roots": (roots, 1e-12),
    "matrix exponential": (lambda c: linalg.expm(np.array(c["a"])).ravel(), 1e-12),
    "matrix logarithm": (lambda c: linalg.logm(np.array(c["a"])).real.ravel(), 1e-12),
    "Lyapunov": (lambda c: linalg.solve_continuous_lyapunov(np.array(c["a"]), -np.array(c["q"])).ravel(), 1e-12),
    "discrete Lyapunov": (lambda c: linalg.solve_discrete_lyapunov(np.array(c["a"]), np.array(c["q"])).ravel(), 1e-12),
    # Plants hardly controllable, with solutions of size 1e4 to 4e6. In all 13 of the 200 discrete cases where the two differ by
    # more than 1e-12 it is the reference that is off: 60-digit arithmetic puts ours at most 1.4e-10 and mostly 1e-13 away.
    "Riccati": (riccati(linalg.solve_continuous_are, lambda a, b, r, x: np.linalg.solve(r, b.T @ x)), 1e-8),
    "discrete Riccati": (riccati(linalg.solve_discrete_are, lambda a, b, r, x: np.linalg.solve(r + b.T @ x @ b, b.T @ x @ a)), 1e-8),
    "sampled noise": (sampled_noise, 1e-12),
    "spectra": (spectra, 1e-12),
    "coherence": (coherence, 1e-12),
    "autocorrelation": (lambda c: acf(c["x"], nlags=20, fft=False), 1e-13),
    # Columns far from zero, of condition up to 1e5, which the reference's pseudoinverse does not refine away.
    "least squares, parameters": (ols(lambda m: m.params), 1e-10),
    "least squares, covariance": (ols(lambda m: m.cov_params()), 1e-10),
    "least squares, R² and residual variance": (ols(lambda m: [m.rsquared, m.mse_resid]), 1e-11),
    "ARX with constant": (arx, 1e-12),
    "Ljung and Box": (ljung_box, 1e-12),
    "F test": (f_test, 1e-11),
    "chi-square quantile": (lambda c: [stats.chi2.ppf(c["p"], c["k"])], 1e-12),
    # Quantiles by bisection on the incomplete beta function, in both.
    "F quantile": (lambda c: [stats.f.ppf(c["p"], c["d1"], c["d2"])], 1e-10),
    "Clopper and Pearson": (clopper_pearson, 1e-11),
    "multiple coherence": (multiple_coherence, 1e-11),
}


def main():
    worst, cases, bad = dict.fromkeys(REFERENCE, 0.0), dict.fromkeys(REFERENCE, 0), []
    where = {}
    for line in sys.stdin:
        c = json.loads(line)
        ours = np.array(c["out"], float)
        theirs = np.asarray(REFERENCE[c["what"]][0](c["in"]), float)
        if ours.shape != theirs.shape:
            bad.append(f"{c['what']}, seed {c['seed']}: {ours.size} numbers, the reference has {theirs.size}")
            continue
        d = np.max(np.abs(ours - theirs)) / max(np.max(np.abs(theirs)), 1e-300)
        cases[c["what"]] += 1
        if not d <= worst[c["what"]]:  # not a number counts as worst
            worst[c["what"]], where[c["what"]] = d, c["seed"]
    print(f"{'quantity':42} {'cases':>6} {'worst difference':>17} {'limit':>8}   seed")
    for what, (_, limit) in REFERENCE.items():
        print(f"{what:42} {cases[what]:6} {worst[what]:17.1e} {limit:8.0e}   {where.get(what, '')}")
        if cases[what] == 0:
            bad.append(f"{what}: no case")
        elif not worst[what] <= limit:
            bad.append(f"{what}: {worst[what]:.2e} is beyond {limit:.0e}, seed {where[what]}")
    for line in bad:
        print("DIFFERS", line)
    return 1 if bad else 0


if __name__ == "__main__":
    sys.exit(main())
