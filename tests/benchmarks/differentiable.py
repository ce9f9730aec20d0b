"""What a value with its gradient costs, in evidences; ratios within one run are printed.

Run it: python -m tests.benchmarks.differentiable
"""

from __future__ import annotations

import statistics
import time

import numpy as np

import evidence as ev
from evidence.distributions import Bernoulli, LogNormal, Normal

RUNS = 60


def logistic(dim):
    rng = np.random.default_rng(0)
    x = rng.normal(size=(200, dim))
    y = (rng.random(200) < 1 / (1 + np.exp(-x @ rng.normal(size=dim)))).astype(float)
    model = ev.Model(
        "logistic",
        {"beta": Normal(0.1, 1.3, shape=(dim,))},
        lambda p, data: Bernoulli(logit=data["x"] @ p["beta"]).log_prob(data["y"]),
    )
    moved = {"priors": {"beta": Normal(0.2, 1.0, shape=(dim,))}}
    return model, {"x": x, "y": y}, moved


def decay():
    rng = np.random.default_rng(3)
    t = np.linspace(0.0, 10.0, 120)
    y = 3 * np.exp(-t / 1.2) + 0.05 * rng.normal(size=120)

    def log_likelihood(p, data):
        return Normal(p["a"] * np.e ** (-p["k"] * data["t"]), p["noise"]).log_prob(data["y"])

    priors = dict.fromkeys(["a", "k", "noise"], LogNormal(0.0, 2.0))
    moved = {"priors": {"a": LogNormal(0.3, 1.0)}}
    return ev.Model("decay", priors, log_likelihood), {"t": t, "y": y}, moved


def seconds(call):
    call()
    spent = []
    for _ in range(RUNS):
        began = time.process_time()
        call()
        spent.append(time.process_time() - began)
    return statistics.median(spent)


def main():
    for name, case in (("decay, d = 3", decay()), *((f"logistic, d = {d}", logistic(d))
                                                    for d in (4, 8, 20))):  # fmt: skip
        model, data, moved = case
        for second_order in (False, True):
            f = ev.evidence_function(model, data, second_order=second_order)
            value = seconds(lambda f=f, moved=moved: f(moved))
            both = seconds(lambda f=f, moved=moved: f.value_and_gradient(moved))
            word = "with second-order term" if second_order else "plain"
            print(f"{name}, {word}: value and gradient cost {both / value:.2f} values")


if __name__ == "__main__":
    main()
