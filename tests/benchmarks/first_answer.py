"""How long the first answer takes in a fresh process, against a script written by hand.

The hand script is what a researcher writes without the package: SciPy's BFGS with a compiled
value and gradient, then a compiled Hessian and ``slogdet``. Both run in fresh processes, in turn;
what is printed are medians and their ratios. Run it: python -m tests.benchmarks.first_answer
"""

from __future__ import annotations

import argparse
import os
import statistics
import subprocess
import sys
import tempfile
import time

MODEL = """
import numpy as np
rng = np.random.default_rng(3)
SIZE = {size}
if SIZE == 5:  # two exponentials with noise
    t = np.linspace(0.0, 10.0, 120)
    y = 3 * np.exp(-t / 1.2) + np.exp(-t / 5) + 0.05 * rng.normal(size=120)
    start = np.array([1.0, 0.0, 0.0, -1.0, -2.0])
    columns = {{"t": t, "y": y}}
else:  # logistic regression on 20 covariates
    x = rng.normal(size=(200, 20))
    y = (rng.random(200) < 1 / (1 + np.exp(-x @ rng.normal(size=20) / 3))).astype(float)
    start = np.zeros(20)
    columns = {{"x": x, "y": y}}
"""

HAND = """
import jax
jax.config.update("jax_enable_x64", True)
import jax.numpy as jnp
from jax.scipy.stats import norm
from scipy.optimize import minimize

def objective(z, columns):
    prior = jnp.sum(norm.logpdf(z, 0.0, 2.0))
    if SIZE == 5:
        a1, k1, a2, k2, s = jnp.exp(z)
        mean = a1 * jnp.exp(-k1 * columns["t"]) + a2 * jnp.exp(-k2 * columns["t"])
        return -(jnp.sum(norm.logpdf(columns["y"], mean, s)) + prior)
    eta = columns["x"] @ z
    return -(jnp.sum(columns["y"] * eta - jnp.logaddexp(0.0, eta)) + prior)

best = minimize(jax.jit(jax.value_and_grad(objective)), start, args=(columns,), jac=True)
hessian = np.asarray(jax.jit(jax.hessian(objective))(best.x, columns))
print(-best.fun + 0.5 * SIZE * np.log(2 * np.pi) - 0.5 * np.linalg.slogdet(hessian)[1])
"""

OURS = """
import sys
import warnings
import evidence as ev
import jax.numpy as jnp
from evidence.distributions import Bernoulli, LogNormal, Normal

def two_exponentials(p, data):
    mean = p["a1"] * jnp.exp(-p["k1"] * data["t"]) + p["a2"] * jnp.exp(-p["k2"] * data["t"])
    return Normal(mean, p["noise"]).log_prob(data["y"])

def logistic(p, data):
    return Bernoulli(logit=data["x"] @ p["beta"]).log_prob(data["y"])

if SIZE == 5:
    prior = LogNormal(0.0, 2.0)
    priors = dict.fromkeys(["a1", "k1", "a2", "k2", "noise"], prior)
    model = ev.Model("two", priors, two_exponentials)
else:
    model = ev.Model("logistic", {"beta": Normal(0.0, 2.0, shape=(20,))}, logistic)
warnings.simplefilter("ignore", ev.EvidenceWarning)
print(ev.approximate(model, columns, depth=sys.argv[1]).laplace)
"""


def run(source: str, size: int, depth: str, cache: str) -> tuple[float, float]:
    """Seconds of one fresh process, and the number that it printed."""
    environment = {**os.environ, "EVIDENCE_COMPILE_CACHE": cache}
    began = time.perf_counter()
    done = subprocess.run(
        [sys.executable, "-c", MODEL.format(size=size) + source, depth],
        env=environment,
        capture_output=True,
        text=True,
        check=True,
    )
    return time.perf_counter() - began, float(done.stdout)


def main() -> None:
    """Print medians and ratios for both models, cold and with the cache warm."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--repeats", type=int, default=7)
    parser.add_argument("--depth", default="none")
    options = parser.parse_args()
    for size in (5, 20):
        with tempfile.TemporaryDirectory() as warm:
            run(OURS, size, options.depth, warm)
            times: dict[str, list[float]] = {"hand": [], "cold": [], "warm": []}
            for _ in range(options.repeats):
                times["hand"].append(run(HAND, size, options.depth, "off")[0])
                times["cold"].append(run(OURS, size, options.depth, "off")[0])
                times["warm"].append(run(OURS, size, options.depth, warm)[0])
        middle = {name: statistics.median(values) for name, values in times.items()}
        print(
            f"{size:2d} parameters, depth {options.depth}: hand script {middle['hand']:.2f} s; "
            f"ours cold {middle['cold']:.2f} s, ratio {middle['cold'] / middle['hand']:.2f}; "
            f"cache warm {middle['warm']:.2f} s, ratio {middle['warm'] / middle['hand']:.2f}",
            flush=True,
        )


if __name__ == "__main__":
    main()
