"""Recompute ``quadrature.json``: the true log integrals that have no closed form.

Run ``python tests/truth/make_quadrature.py [names]``: the trapezoid rule on two grids, the second
15 % wider and 31 % finer; their difference is stored as the disagreement. Takes some minutes.
"""

from __future__ import annotations

import json
import sys
import time
from pathlib import Path

import jax
import numpy as np
from integrals import Quadrature, every_case
from scipy import optimize, special

CHUNK = 100_000
FILE = Path(__file__).parent / "quadrature.json"


def whiten(log_density, start) -> tuple[np.ndarray, np.ndarray]:
    """Peak [k] and a matrix [k, k] whose columns are one-sd steps, by scipy."""
    down = jax.jit(jax.value_and_grad(lambda z: -log_density(z)))
    found = optimize.minimize(
        lambda z: tuple(np.asarray(part) for part in down(z)), np.array(start), jac=True
    )
    curvature = np.asarray(jax.jit(jax.hessian(lambda z: -log_density(z)))(found.x))
    values, vectors = np.linalg.eigh(curvature)
    return found.x, vectors / np.sqrt(np.maximum(values, 1e-3 * values.max()))


def trapezoid(log_density, axes, centre, steps) -> float:
    """Log of the trapezoid sum over the tensor grid ``centre + steps @ u``, u on the axes."""
    batch = jax.jit(jax.vmap(log_density))
    shape = tuple(len(axis) for axis in axes)
    logs = []
    for first in range(0, int(np.prod(shape)), CHUNK):
        # the last chunk is filled up with the last point, so that one program serves all
        number = np.arange(first, first + CHUNK)
        inside = number < np.prod(shape)
        index = np.unravel_index(np.minimum(number, np.prod(shape) - 1), shape)
        u = np.stack([axis[i] for axis, i in zip(axes, index, strict=True)], axis=1)
        values = np.asarray(batch(centre + u @ steps.T))
        logs.append(special.logsumexp(np.where(inside & ~np.isnan(values), values, -np.inf)))
    cell = sum(np.log(axis[1] - axis[0]) for axis in axes)
    return float(special.logsumexp(logs) + cell + np.linalg.slogdet(steps)[1])


def integrate(rule: Quadrature) -> tuple[float, float]:
    """Log integral and the disagreement of two grids [nats]."""
    dimension = len(rule.low)
    centre, steps = np.zeros(dimension), np.eye(dimension)
    if rule.whiten_from is not None:
        centre, steps = whiten(rule.log_density, rule.whiten_from)
    low, high = np.array(rule.low), np.array(rule.high)
    answers = []
    for wider, finer in ((1.0, 1.0), (1.15, 1.31)):
        middle, half = (low + high) / 2.0, wider * (high - low) / 2.0
        axes = [
            np.linspace(m - h, m + h, int(finer * n))
            for m, h, n in zip(middle, half, rule.points, strict=True)
        ]
        answers.append(trapezoid(rule.log_density, axes, centre, steps))
    return answers[1] + float(np.log(rule.copies)), abs(answers[0] - answers[1])


def main(names: list[str]) -> None:
    """Recompute the named cases, or all that need it."""
    known = json.loads(FILE.read_text()) if FILE.exists() else {}
    for name, build in every_case().items():
        rule = build().quadrature
        if rule is None or (names and name not in names):
            continue
        began = time.perf_counter()
        with jax.enable_x64(True):
            value, disagreement = integrate(rule)
        known[name] = {"log_integral": value, "disagreement": disagreement}
        FILE.write_text(json.dumps(known, indent=1) + "\n")
        seconds = time.perf_counter() - began
        print(f"{name:24s} {value:.12f}  disagreement {disagreement:.1e}  {seconds:.0f} s")


if __name__ == "__main__":
    main(sys.argv[1:])
