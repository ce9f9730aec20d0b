"""One row for each ready part and variant: a model, its columns, and values to simulate from."""

from __future__ import annotations

import dataclasses
import functools
import math
from typing import Any

import jax
import numpy as np

from evidence import shelf
from evidence.model import Model

ROWS = 60
DRAWS = 400
X = np.linspace(0.0, 30.0, ROWS)
DESIGN = {
    "x": X,
    "depth": 40.0 + 25.0 * np.sin(1.7 * np.arange(ROWS)),
    "trials": 5 + np.arange(ROWS) % 9,
    "hours": 0.5 + (np.arange(ROWS) % 4),
}
PREDICTORS = {"x": (15.0, 10.0), "depth": (40.0, 20.0)}


@dataclasses.dataclass(frozen=True)
class Part:
    """A variant of a ready part."""

    model: Model
    truth: dict[str, Any]
    whole: bool = False  # whether the response holds whole numbers

    def __repr__(self):
        return self.model.name

    @functools.cached_property
    def draws(self) -> np.ndarray:
        """Responses simulated at the truth: [DRAWS, rows]."""
        keys = jax.random.split(jax.random.key(11), DRAWS)
        one = lambda key, p, data: self.model.simulate(key, p, data)["y"]  # noqa: E731
        return evaluate(jax.vmap(one, (0, None, None)), keys, self.values, self.columns)

    @property
    def values(self) -> dict[str, Any]:
        """Values of parameters and constants, as a log-likelihood receives them."""
        return {**self.model.constants, **{k: np.asarray(v, float) for k, v in self.truth.items()}}

    @property
    def columns(self) -> dict[str, np.ndarray]:
        """The design, and a response of zeros where none is drawn yet."""
        return {**DESIGN, "y": np.zeros(ROWS, int if self.whole else float)}

    def data(self) -> dict[str, np.ndarray]:
        return {**DESIGN, "y": self.draws[0]}


def evaluate(function, *arguments):
    """Run a traced function in float64, as the package does."""
    with jax.enable_x64(True):
        return jax.tree_util.tree_map(np.asarray, jax.jit(function)(*arguments))


def likelihood(model: Model, p: dict[str, Any], data: dict[str, np.ndarray]) -> float:
    """Sum of the log-likelihood terms at given values [nats]."""
    values = {k: np.asarray(v, float) for k, v in {**model.constants, **p}.items()}
    return float(evaluate(model.log_likelihood, values, data).sum())


def _slopes(intercept: float, **others: float) -> dict[str, float]:
    return {"intercept": intercept, "slope_x": 0.6, "slope_depth": -0.4, **others}


CURVE = {"response": "y", "scale": 10.0}
DECAY = {**CURVE, "time": "x", "time_scale": 20.0}
DOSE = {**CURVE, "dose": "x", "dose_scale": 8.0}
LEVEL = {"response": "y", "scale": 0.5, "centre": 1.0}
PROCESS = {**LEVEL, "x": "x"}
RISEN = {"height": 8.0, "half": 5.0, "noise": 0.3}
TURN = {"level": 1.1, "noise": 0.1}
SMOOTH = {"level": 1.1, "amplitude": 0.6, "noise": 0.2}

PARTS = [
    Part(
        shelf.linear_regression("linear", "y", PREDICTORS, scale=2.0, centre=1.0),
        _slopes(1.5, noise=0.7),
    ),
    Part(shelf.linear_regression("level", "y", scale=2.0), {"intercept": 1.5, "noise": 0.7}),
    Part(shelf.logistic_regression("yes or no", "y", PREDICTORS), _slopes(0.3), whole=True),
    Part(
        shelf.logistic_regression("successes", "y", PREDICTORS, trials="trials"),
        _slopes(0.3),
        whole=True,
    ),
    Part(
        shelf.poisson_regression("poisson", "y", PREDICTORS, typical=5.0, exposure="hours"),
        _slopes(1.8),
        whole=True,
    ),
    Part(
        shelf.negative_binomial_regression("clustered", "y", PREDICTORS, typical=5.0),
        _slopes(1.8, size=2.5),
        whole=True,
    ),
    Part(
        shelf.exponentials("one exponential", **DECAY), {"amount": 9.0, "rate": 0.1, "noise": 0.3}
    ),
    Part(
        shelf.exponentials("two exponentials", terms=2, offset=True, **DECAY),
        {
            "amount": 9.0,
            "rate": 0.1,
            "excess": [9.0],
            "share": [0.6, 0.4],
            "offset": 2.0,
            "noise": 0.05,
        },
    ),
    Part(shelf.saturation("hyperbola", **DOSE), RISEN),
    Part(shelf.saturation("exponential", kind="exponential", **DOSE), RISEN),
    Part(shelf.saturation("tanh", kind="tanh", **DOSE), RISEN),
    Part(
        shelf.saturation("hill", kind="hill", baseline=True, **DOSE),
        {**RISEN, "baseline": 1.0, "power": 2.5},
    ),
    Part(
        shelf.change_point("jump", "y", "x", between=(0.0, 30.0), scale=0.5, centre=1.0),
        {**TURN, "jump": 0.6, "where": 11.3},
    ),
    Part(
        shelf.change_point("bend", "y", "x", "bend", between=(0.0, 30.0), scale=1.0, centre=1.0),
        {**TURN, "slope": 0.8, "bend": -2.0, "where": 11.3},
    ),
    Part(
        shelf.sinusoid("sinusoid", time="x", periods=(3.0, 20.0), reference=15.0, **LEVEL),
        {**TURN, "cosine": [0.3], "sine": [-0.4], "frequency": 1 / 7.3},
    ),
    Part(
        shelf.sinusoid("harmonics", time="x", periods=7.3, harmonics=2, **LEVEL),
        {**TURN, "cosine": [0.3, 0.1], "sine": [-0.4, 0.2]},
    ),
    Part(shelf.gaussian_process("smooth", length=4.0, **PROCESS), {**SMOOTH, "length": 2.5}),
    Part(
        shelf.gaussian_process("rough", kernel="matern 3/2", length=4.0, **PROCESS),
        {**SMOOTH, "length": 2.5},
    ),
    Part(
        shelf.gaussian_process("smoother", kernel="matern 5/2", length=4.0, **PROCESS),
        {**SMOOTH, "length": 2.5},
    ),
    Part(
        shelf.gaussian_process("periodic", kernel="periodic", period=7.3, **PROCESS),
        {**SMOOTH, "length": 0.9},
    ),
]
BY_NAME = {part.model.name: part for part in PARTS}
PROCESSES = [part for part in PARTS if "amplitude" in part.truth]
INDEPENDENT = [part for part in PARTS if "amplitude" not in part.truth]
FIVE_ERRORS = 5.0 / math.sqrt(DRAWS)
