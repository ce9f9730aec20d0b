"""Recompute ``values.json``: known log integrals and the first terms of their Laplace series.

Run ``python tests/reference/make_values.py``. Everything is computed by mpmath at 50 digits, the
second-order coefficient from derivatives of the log density in one dimension and from the closed
expression elsewhere; below 16 digits it refuses to run. A test calls it and compares.

Notation: exact = Laplace x (1 + c + ...); the package's second-order term is c.
Formulas: Stirling's series, DLMF 5.11.1; Bessel function at large argument, DLMF 10.40.1;
conjugate families, Bernardo & Smith (1994), Bayesian Theory, appendix A (from memory, each
re-verified by quadrature); g-prior, Liang, Paulo, Molina, Clyde & Berger (2008), JASA 103;
Hilbert determinants, OEIS A005249 (from memory, verified by elimination).
"""

from __future__ import annotations

import argparse
import json
from pathlib import Path

import mpmath as mp

HERE = Path(__file__).parent
DIGITS = 50
SHOWN = 20


def peak_terms(log_density, start) -> dict[str, mp.mpf]:
    """Mode, plain Laplace value and second-order coefficient in one dimension."""
    # two points beside the start: a longer first step can leave the support
    near = (start - mp.mpf("0.001"), start + mp.mpf("0.0011"))
    mode = mp.findroot(lambda x: mp.diff(log_density, x), near)
    h2, h3, h4 = (-mp.diff(log_density, mode, n) for n in (2, 3, 4))
    laplace = log_density(mode) + mp.log(2 * mp.pi / h2) / 2
    second = -h4 / (8 * h2**2) + 5 * h3**2 / (24 * h2**3)
    return {"mode": mode, "laplace": laplace, "second_order_term": second}


def gamma_in_t(n) -> dict:
    """n! = int t^n exp(-t) dt, t > 0."""
    terms = peak_terms(lambda t: n * mp.log(t) - t, mp.mpf(n))
    return {"n": n, "log_integral": mp.loggamma(n + 1), **terms}


def gamma_in_log_t(n) -> dict:
    """Gamma(n) = int exp(n w - exp(w)) dw."""
    terms = peak_terms(lambda w: n * w - mp.exp(w), mp.log(n))
    return {"n": n, "log_integral": mp.loggamma(n), **terms}


def bessel(x) -> dict:
    """2 pi I_0(x) = int exp(x cos t) dt over one period."""
    terms = peak_terms(lambda t: x * mp.cos(t), mp.mpf("0.01"))
    return {"x": x, "log_integral": mp.log(2 * mp.pi * mp.besseli(0, x)), **terms}


def beta_in_logit(a, b) -> dict:
    """B(a, b) in the logit of the fraction."""
    terms = peak_terms(
        lambda z: -a * mp.log1p(mp.exp(-z)) - b * mp.log1p(mp.exp(z)), mp.log(mp.mpf(a) / b)
    )
    return {"a": a, "b": b, "log_integral": mp.log(mp.beta(a, b)), **terms}


def beta_in_fraction(a, b) -> dict:
    """B(a + 1, b + 1) in the fraction itself."""
    terms = peak_terms(lambda p: a * mp.log(p) + b * mp.log(1 - p), mp.mpf(a) / (a + b))
    return {"a": a, "b": b, "log_integral": mp.log(mp.beta(a + 1, b + 1)), **terms}


def log_dirichlet(a) -> mp.mpf:
    return sum(mp.loggamma(x) for x in a) - mp.loggamma(sum(a))


def dirichlet(a) -> dict:
    """Dirichlet normaliser in log(p_i / p_K): peak at p = a / A, det H = prod(a) / A."""
    a = [mp.mpf(x) for x in a]
    total, size = sum(a), len(a) - 1
    height = sum(x * mp.log(x / total) for x in a)
    log_det = sum(mp.log(x) for x in a) - mp.log(total)
    return {
        "a": a,
        "log_integral": log_dirichlet(a),
        "laplace": height + size * mp.log(2 * mp.pi) / 2 - log_det / 2,
        "second_order_term": (sum(1 / x for x in a) - 1 / total) / 12,
    }


def quartic(size) -> dict:
    """int exp(-x^2/2 - size x^4) dx by the Bessel function K_{1/4}."""
    size = mp.mpf(size)
    inner = 1 / (32 * size)
    value = mp.exp(inner) * mp.besselk(mp.mpf(1) / 4, inner) / (2 * mp.sqrt(2 * size))
    terms = peak_terms(lambda x: -(x**2) / 2 - size * x**4, mp.mpf("0.001"))
    return {"size": size, "log_integral": mp.log(value), **terms}


def hilbert(n) -> dict:
    """A Gaussian whose precision is the Hilbert matrix, without its constant."""
    log_det = mp.log(abs(mp.det(mp.hilbert(n))))
    return {"n": n, "inverse_determinant": mp.exp(-log_det),
            "log_integral": (n * mp.log(2 * mp.pi) - log_det) / 2}  # fmt: skip


def binomial_beta(y, n, a, b) -> dict:
    """y ~ Binomial(n, p), p ~ Beta(a, b)."""
    a, b = mp.mpf(a), mp.mpf(b)
    constant = mp.log(mp.binomial(n, y)) - mp.log(mp.beta(a, b))
    core = beta_in_logit(y + a, n - y + b)
    return {"y": y, "n": n, "a": a, "b": b, **shifted(core, constant)}


def shifted(core: dict, constant) -> dict:
    """Add a constant to a log integral and to its Laplace value."""
    known = {"log_integral": core["log_integral"] + constant, "laplace": core["laplace"] + constant}
    kept = {key: core[key] for key in ("mode", "second_order_term") if key in core}
    return {**known, **kept}


def gamma_shape_rate(shape, rate) -> dict:
    """int exp(shape w - rate exp(w)) dw."""
    terms = peak_terms(lambda w: shape * w - rate * mp.exp(w), mp.log(shape / rate))
    return {"log_integral": mp.loggamma(shape) - shape * mp.log(rate), **terms}


def poisson_gamma(counts, a, b) -> dict:
    """Counts ~ Poisson(t), t ~ Gamma(a, rate b), in log t; counts as (value, how many)."""
    a, b = mp.mpf(a), mp.mpf(b)
    total = sum(k * m for k, m in counts)
    constant = a * mp.log(b) - mp.loggamma(a) - sum(m * mp.loggamma(k + 1) for k, m in counts)
    core = gamma_shape_rate(a + total, b + sum(m for _, m in counts))
    return {"counts": counts, "a": a, "b": b, **shifted(core, constant)}


def multinomial_dirichlet(y, a) -> dict:
    """y ~ Multinomial(sum y, p), p ~ Dirichlet(a), in log(p_i / p_K)."""
    a = [mp.mpf(x) for x in a]
    constant = mp.loggamma(sum(y) + 1) - sum(mp.loggamma(k + 1) for k in y) - log_dirichlet(a)
    core = dirichlet([k + x for k, x in zip(y, a, strict=True)])
    return {"y": y, "a": a, **shifted(core, constant)}


def normal_mean(y, m0, t2, s2) -> dict:
    """y ~ N(mu, s2), mu ~ N(m0, t2): Laplace is exact."""
    y, m0, t2, s2 = [mp.mpf(str(v)) for v in y], mp.mpf(m0), mp.mpf(t2), mp.mpf(s2)
    n, mean = len(y), sum(y) / len(y)
    squares = sum((v - mean) ** 2 for v in y)
    quadratic = squares / s2 + n * (mean - m0) ** 2 / (s2 + n * t2)
    value = -(n * mp.log(2 * mp.pi * s2) + mp.log(1 + n * t2 / s2) + quadratic) / 2
    return {"m0": m0, "t2": t2, "s2": s2, "log_integral": value, "laplace": value,
            "second_order_term": mp.mpf(0)}  # fmt: skip


def gaussian_gamma(shape, m) -> dict[str, mp.mpf]:
    """Gap of Laplace's method, and c, for ``shape (v + exp(-v)) + exp(-v) |u|^2 / 2``, u in R^m.

    The joint form of m Gaussian coordinates and their log variance v. Integrating u first leaves
    a gamma integral of shape ``shape - m/2``; c follows from the tensor formula by hand.
    """
    shape = mp.mpf(shape)
    inner = shape - mp.mpf(m) / 2
    gap = mp.loggamma(inner) - inner * mp.log(shape) + shape - mp.log(2 * mp.pi / shape) / 2
    return {"gap": gap, "second_order_term": (3 * m**2 + 6 * m + 2) / (24 * shape)}


def normal_inverse_gamma(rows, y, v0, a0, b0) -> dict:
    """y ~ N(X w, s2), w ~ N(0, v0 s2), s2 ~ InverseGamma(a0, b0); in (w, log s2)."""
    design, y = mp.matrix(rows), mp.matrix([mp.mpf(str(v)) for v in y])
    n, p = design.rows, design.cols
    v0, a0, b0 = mp.mpf(v0), mp.mpf(a0), mp.mpf(b0)
    precision = mp.eye(p) / v0 + design.T * design
    moment = design.T * y
    shape = a0 + mp.mpf(n) / 2
    scale = b0 + ((y.T * y)[0] - (moment.T * mp.lu_solve(precision, moment))[0]) / 2
    value = -n * mp.log(2 * mp.pi) / 2 - p * mp.log(v0) / 2 - mp.log(mp.det(precision)) / 2
    value += a0 * mp.log(b0) - shape * mp.log(scale) + mp.loggamma(shape) - mp.loggamma(a0)
    terms = gaussian_gamma(shape + mp.mpf(p) / 2, p)
    return {"v0": v0, "a0": a0, "b0": b0, "log_integral": value, "laplace": value - terms["gap"],
            "second_order_term": terms["second_order_term"]}  # fmt: skip


def g_prior(rows, y, g) -> dict:
    """Log Bayes factor of centred regressors under Zellner's g-prior against the intercept."""
    y = [mp.mpf(str(v)) for v in y]
    n, p = len(y), len(rows[0])
    means = [sum(mp.mpf(str(r[j])) for r in rows) / n for j in range(p)]
    design = mp.matrix([[mp.mpf(str(r[j])) - means[j] for j in range(p)] for r in rows])
    centred = mp.matrix([v - sum(y) / n for v in y])
    moment = design.T * centred
    explained = (moment.T * mp.lu_solve(design.T * design, moment))[0]
    r_squared = explained / (centred.T * centred)[0]
    value = mp.mpf(n - 1 - p) / 2 * mp.log(1 + g)
    value -= mp.mpf(n - 1) / 2 * mp.log(1 + g * (1 - r_squared))
    # in (intercept, slopes, log variance); the null has no slopes
    with_slopes, null = gaussian_gamma(mp.mpf(n + p) / 2, p + 1), gaussian_gamma(mp.mpf(n) / 2, 1)
    return {"g": g, "r_squared": r_squared, "log_bayes_factor": value,
            "laplace": value - with_slopes["gap"] + null["gap"],
            "second_order_term": with_slopes["second_order_term"],
            "second_order_term_null": null["second_order_term"]}  # fmt: skip


def exponential_gamma(y, a, b) -> dict:
    """y ~ Exponential(rate t), t ~ Gamma(a, rate b), in log t."""
    a, b = mp.mpf(a), mp.mpf(b)
    core = gamma_shape_rate(a + len(y), b + sum(mp.mpf(v) for v in y))
    return {"a": a, "b": b, **shifted(core, a * mp.log(b) - mp.loggamma(a))}


def inverse_gamma_variance(y, a, b) -> dict:
    """y ~ N(0, s2), s2 ~ InverseGamma(a, b), in log s2: a gamma integral in -log s2."""
    y, a, b = [mp.mpf(str(v)) for v in y], mp.mpf(a), mp.mpf(b)
    core = gamma_shape_rate(a + mp.mpf(len(y)) / 2, b + sum(v**2 for v in y) / 2)
    constant = a * mp.log(b) - mp.loggamma(a) - len(y) * mp.log(2 * mp.pi) / 2
    return {"a": a, "b": b, **shifted({**core, "mode": -core["mode"]}, constant)}


def series() -> dict[str, list[dict]]:
    """Laplace's method itself."""
    return {
        "gamma_in_t": [gamma_in_t(n) for n in (1, 5, 10, 50)],
        "gamma_in_log_t": [gamma_in_log_t(n) for n in (1, 5, 10, 50)],
        "bessel": [bessel(x) for x in (2, 10, 50)],
        "beta_symmetric": [beta_in_logit(n, n) for n in (1, 5, 20)],
        "beta_in_logit": [beta_in_logit(*ab) for ab in ((3, 7), (20, 5), (140, 110))],
        "beta_in_fraction": [beta_in_fraction(*ab) for ab in ((3, 7), (20, 5), (140, 110))],
        "dirichlet": [dirichlet(a) for a in ((2, 3, 5), (1, 4, 2, 6), (3, 1, 2, 8, 5))],
        "quartic": [quartic(s) for s in ("0.001", "0.01", "0.05")],
        "hilbert": [hilbert(n) for n in (2, 3, 4, 5, 6)],
    }


def closed_forms() -> dict[str, list[dict]]:
    """Evidences of conjugate models."""
    data = json.loads((HERE / "datasets.json").read_text())
    sleep = [row[0] for row in data["sleep_differences"]["data"]]
    cement = data["cement"]["data"]
    heat = [row[4] for row in cement]
    some = {"x1,x2": (0, 1), "x1-x4": (0, 1, 2, 3), "x4": (3,)}
    picked = {name: [[row[j] for j in at] for row in cement] for name, at in some.items()}
    kicks = data["horse_kicks"]["data"]
    pi_digits = [[1, 2], [3, 1], [4, 1], [5, 1]]
    return {
        "binomial_beta": [binomial_beta(140, 250, 1, 1), binomial_beta(7, 20, "0.5", "0.5"),
                          binomial_beta(3, 12, 2, 5)],
        "poisson_gamma": [poisson_gamma(kicks, 1, 1), poisson_gamma(pi_digits, 2, "0.5"),
                          poisson_gamma([[0, 3]], "0.5", "0.1")],
        "multinomial_dirichlet": [multinomial_dirichlet([125, 18, 20, 34], [1] * 4),
                                  multinomial_dirichlet([3, 0, 2], ["0.5"] * 3),
                                  multinomial_dirichlet([10, 20, 30, 40], [2] * 4)],
        "normal_mean": [normal_mean(sleep, 0, 1, "1.5"), normal_mean(sleep, -1, 4, 1),
                        normal_mean([2], 0, 9, 1)],
        "normal_inverse_gamma": [{"data": "sleep_differences",
                                  **normal_inverse_gamma([[1]] * 10, sleep, 4, 2, 2)}],
        "regression": [{"data": name, **normal_inverse_gamma([[1, *r] for r in rows], heat,
                                                             100, 1, 1)}
                       for name, rows in picked.items()],
        "g_prior": [{"data": name, **g_prior(picked[name], heat, g)}
                    for name, g in (("x1,x2", 13), ("x1-x4", 13), ("x4", 169))],
        "exponential_gamma": [exponential_gamma(["1.2", "0.4", "3.1", "0.9"], 2, "1.5")],
        "inverse_gamma_variance": [inverse_gamma_variance(sleep, 2, 3)],
    }  # fmt: skip


def plain(value):
    """mpmath numbers to text of 20 digits, the rest as it is."""
    if isinstance(value, mp.mpf):
        # a mode at zero is found only to the working precision
        return mp.nstr(mp.chop(value, tol=mp.mpf("1e-40")), SHOWN)
    if isinstance(value, dict):
        return {key: plain(item) for key, item in value.items()}
    return [plain(item) for item in value] if isinstance(value, list | tuple) else value


def make(digits: int = DIGITS) -> dict:
    """Every value, as text.

    Raises
    ------
    ValueError
        Below 16 digits: the tests compare float64 numbers with these.
    """
    if digits < 16:
        raise ValueError(f"at least 16 digits are needed; got {digits}. Type: --digits {DIGITS}")
    with mp.workdps(digits):
        return plain({"digits": digits, "source": __doc__, **series(), **closed_forms()})


if __name__ == "__main__":
    parser = argparse.ArgumentParser()
    parser.add_argument("--digits", type=int, default=DIGITS)
    made = make(parser.parse_args().digits)
    (HERE / "values.json").write_text(json.dumps(made, indent=1) + "\n")
