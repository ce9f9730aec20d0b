"""What one evidence of many costs, beside a Python loop over SciPy's trust-exact.

Two exponentials, 5 parameters, 120 points, invented data. Everything is measured in one run, in
turn, so that the ratios hold on a busy machine; times are of the processor. Nothing is asserted.
Run it: python -m tests.benchmarks.many_data_sets
"""

from __future__ import annotations

import argparse
import resource
import statistics
import time
from collections.abc import Callable
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from scipy.optimize import minimize

import evidence as ev
from evidence.batches.density import Given, RowDensity
from evidence.compiling import compile_ahead, float64
from evidence.distributions import LogNormal, Normal
from evidence.problem import Problem

TIMES = np.linspace(0.0, 10.0, 120)
# the rates are in order, so that each data set has one mode and no twin of it
PRIORS = {
    "first": LogNormal(1.0, 0.5),
    "second": LogNormal(0.0, 0.5),
    "slow": LogNormal(-1.5, 0.5),
    "excess": LogNormal(1.0, 0.7),
    "noise": LogNormal(-3.0, 1.0),
}


def two_exponentials(p: Any, data: Any) -> Any:
    """Terms of two exponentials with Gaussian noise."""
    fast = p["slow"] * (1.0 + p["excess"])
    mean = p["first"] * jnp.exp(-fast * data["t"]) + p["second"] * jnp.exp(-p["slow"] * data["t"])
    return Normal(mean, p["noise"]).log_prob(data["y"])


def make_data(count: int, seed: int = 0) -> np.ndarray:
    """Invented records (count, 120)."""
    rng = np.random.default_rng(seed)
    mean = 3 * np.exp(-TIMES / 1.2) + np.exp(-TIMES / 5)
    return mean + 0.05 * rng.normal(size=(count, len(TIMES)))


def clock(work: Callable[[], Any]) -> tuple[float, float]:
    """Seconds of the processor and of the wall."""
    cpu, wall = time.process_time(), time.perf_counter()
    work()
    return time.process_time() - cpu, time.perf_counter() - wall


class Bench:
    """The candidate, its data and the four things that are timed."""

    def __init__(self, count: int, loop: int) -> None:
        self.count, self.loop = count, loop
        self.y = make_data(count)
        self.model = ev.Model("two", PRIORS, two_exponentials)
        self.problem = Problem(self.model, {"t": TIMES, "y": self.y[0]})
        self.start = (
            ev.approximate(self.model, {"t": TIMES, "y": self.y[0]}, depth="none").modes[0].z
        )
        density = RowDensity(self.model, self.problem.layout)
        given = Given(self.model.hyperparameters(), {"t": TIMES}, {"y": self.y}, None)

        def floor(z: Any, given: Given) -> Any:
            one = lambda a: density.objective(a[0], given._replace(columns=a[1]))  # noqa: E731
            return jax.lax.map(one, (z, given.columns), batch_size=64)

        z = np.tile(self.start, (count, 1))
        self.floor_program, self.floor_arguments = compile_ahead(floor, z, given), (z, given)

    def floor(self) -> None:
        """One value, gradient and Hessian for each data set."""
        with float64():
            jax.block_until_ready(self.floor_program(*self.floor_arguments))

    def scipy_loop(self) -> None:
        """What is written by hand: trust-exact from the template, then slogdet."""
        with float64():
            for y in self.y[: self.loop]:
                minimize(self._value, self.start, args=(y,), jac=True, hess=self._curve,
                         method="trust-exact")  # fmt: skip

    def _evaluate(self, z: np.ndarray, y: np.ndarray) -> Any:
        if not hasattr(self, "_program"):
            density, hyper = self.problem.density, self.model.hyperparameters()
            self._program = jax.jit(lambda z, y: density.evaluate(z, hyper, {"t": TIMES, "y": y}))
        return self._program(z, y)

    def _value(self, z: np.ndarray, y: np.ndarray) -> tuple[float, np.ndarray]:
        here = self._evaluate(z, y)
        return -float(here.log_density), -np.asarray(here.gradient)

    def _curve(self, z: np.ndarray, y: np.ndarray) -> np.ndarray:
        return np.asarray(self._evaluate(z, y).hessian)

    def weigh(self, depth: str, threads: int = 1, count: int | None = None) -> None:
        """Ours."""
        ev.weigh_many([self.model], {"y": self.y[:count]}, shared={"t": TIMES}, depth=depth,
                      threads=threads)  # fmt: skip


def ragged(model: Any, y: np.ndarray) -> tuple[float, float]:
    """Seconds for data sets of 20 to 120 points, and how many points they have."""
    rng = np.random.default_rng(1)
    lengths = rng.integers(20, 121, len(y))
    data = [{"t": TIMES[:n], "y": row[:n]} for n, row in zip(lengths, y, strict=True)]
    run = lambda: ev.weigh_many([model], data, depth="none", threads=1)  # noqa: E731
    run()
    return clock(run)[0], float(lengths.sum())


def main() -> None:
    """Print microseconds per evidence and ratios."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--count", type=int, default=8192)
    parser.add_argument("--loop", type=int, default=20)
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--sizes", type=int, nargs="*", default=[])
    parser.add_argument("--ragged", action="store_true")
    options = parser.parse_args()
    bench = Bench(options.count, options.loop)
    timed = {
        "floor": (bench.floor, options.count),
        "none": (lambda: bench.weigh("none"), options.count),
        "none, 2 threads": (lambda: bench.weigh("none", 2), options.count),
        "quick": (lambda: bench.weigh("quick"), options.count),
        "scipy": (bench.scipy_loop, options.loop),
    }
    for work, _ in timed.values():
        work()
    cpu: dict[str, list[float]] = {name: [] for name in timed}
    wall: dict[str, list[float]] = {name: [] for name in timed}
    for _ in range(options.repeats):
        for name, (work, count) in timed.items():
            spent = clock(work)
            cpu[name].append(1e6 * spent[0] / count)
            wall[name].append(1e6 * spent[1] / count)
    middle = {name: statistics.median(values) for name, values in cpu.items()}
    for name, value in middle.items():
        print(f"{name:16s} {value:9.1f} core-us each, wall {statistics.median(wall[name]):9.1f}")
    print(f"depth none is {middle['none'] / middle['floor']:.1f} evaluations, "
          f"{middle['scipy'] / middle['none']:.0f} times a trust-exact loop; quick is "
          f"{middle['quick'] / middle['none']:.2f} times none; two threads "
          f"{statistics.median(wall['none']) / statistics.median(wall['none, 2 threads']):.2f} "
          f"times one")  # fmt: skip
    for size in options.sizes:
        one = Bench(size, 1)
        one.weigh("none")
        spent = clock(lambda one=one: one.weigh("none"))[0]
        floor = clock(one.floor)[0]
        peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
        print(f"{size:8d} data sets: {1e6 * spent / size:.1f} core-us each, "
              f"{spent / floor:.1f} evaluations; peak memory so far {peak:.2f} GiB")  # fmt: skip
    if options.ragged:
        spent, points = ragged(bench.model, bench.y)
        even = middle["none"] * 1e-6 / len(TIMES)
        print(f"ragged: {spent / points / even:.2f} times the cost per point of whole ones")


if __name__ == "__main__":
    main()
