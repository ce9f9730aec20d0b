"""The Gaussian posterior of Laplace's method, in the user's units.

Gaussian in the unconstrained coordinates, one piece per mode; what the user reads is carried to
natural units by draws through the transform.
"""

from __future__ import annotations

import dataclasses
import functools
import warnings
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from evidence.arithmetic import log_sum_exp
from evidence.complaints import DeclarationError, near_name, sentence
from evidence.laplace import LOG_2PI, Mode
from evidence.marginals import END_DENSITY, interval_shift, marginal
from evidence.problem import Problem

__all__ = ["COLUMNS", "Posterior", "RecordedPosterior", "WeightedDraws"]

TABLE_DRAWS = 20_000
INTERVAL = (0.025, 0.975)
SHIFTED = 0.25  # sd by which an interval's end must be off before the reader is told
MARGINALS = 30  # parameters of which marginals are drawn
COLUMNS = {
    "parameter": "name, with the index of an array's entry",
    "unit": "as declared in units=",
    "mode": "at the peak of the posterior in the unconstrained coordinates [natural units]",
    "mean": "posterior mean, by draws [natural units]",
    "sd": "posterior standard deviation, by draws, from the full Hessian [natural units]",
    "low": "2.5 % quantile, by draws [natural units]",
    "high": "97.5 % quantile, by draws [natural units]",
    "note": "as declared in notes=",
}


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False)
class WeightedDraws:
    """Draws of the audit's accepted mixture with their weights: better than the Gaussian.

    Attributes
    ----------
    z : (n, d)
        Draws [unconstrained].
    log_weights : (n,)
        Log of target over proposal, not normalised [nats].
    """

    z: np.ndarray
    log_weights: np.ndarray

    @property
    def effective(self) -> float:
        """How many draws of equal weight these are worth (Kish 1965)."""
        share = np.exp(self.log_weights - log_sum_exp(self.log_weights))
        return float(1.0 / np.sum(share**2))

    def resample(self, number: int, seed: int) -> np.ndarray:
        """Draws (number, d) of equal weight, by systematic resampling (Kitagawa 1996)."""
        share = np.exp(self.log_weights - log_sum_exp(self.log_weights))
        rng = np.random.default_rng([seed, 0xD4A5])
        comb = (np.arange(number) + rng.random()) / number
        chosen = np.searchsorted(np.cumsum(share), comb).clip(max=len(share) - 1)
        return self.z[rng.permutation(chosen)]


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False)
class Posterior:
    """Posterior of one candidate, as a mixture of one Gaussian per mode in z.

    Attributes
    ----------
    problem : Problem
    modes : tuple of Mode
        Peaks, the leading one first.
    seed : int
        Of the draws behind the table.
    weighted : WeightedDraws, optional
        What the audit accepted; `refined` is the posterior made of it.
    source : str
        "gaussian" or "refined".
    """

    problem: Problem = dataclasses.field(repr=False)
    modes: tuple[Mode, ...] = dataclasses.field(repr=False)
    seed: int = 0
    weighted: WeightedDraws | None = dataclasses.field(default=None, repr=False)
    source: str = "gaussian"

    @property
    def mean_z(self) -> np.ndarray:
        """(d,) peak of the leading mode [unconstrained]."""
        return self.modes[0].z

    @property
    def covariance_z(self) -> np.ndarray:
        """(d, d) inverse Hessian at the leading mode [unconstrained]."""
        return np.linalg.inv(self.modes[0].hessian)

    @property
    def mode_weights(self) -> np.ndarray:
        """(modes,) shares of the modes in the Laplace sum."""
        laplace = np.array([mode.laplace for mode in self.modes])
        return np.exp(laplace - log_sum_exp(laplace))

    @functools.cached_property
    def refined(self) -> Posterior | None:
        """Posterior by the audit's weighted draws, or None where no audit accepted any."""
        if self.weighted is None:
            return None
        return dataclasses.replace(self, source="refined")

    def draws_z(self, number: int = 1000, *, seed: int | None = None) -> np.ndarray:
        """Draws in the unconstrained coordinates: (number, d)."""
        seed = self.seed if seed is None else seed
        if self.source == "refined" and self.weighted is not None:
            return self.weighted.resample(number, seed)
        rng = np.random.default_rng([seed, 0xD4A3])
        d = self.problem.dim
        chosen = rng.choice(len(self.modes), size=number, p=self.mode_weights)
        noise = rng.standard_normal((number, d))
        out = np.empty((number, d))
        for index, mode in enumerate(self.modes):
            rows = chosen == index
            factor = np.linalg.cholesky(mode.hessian)
            out[rows] = mode.z + np.linalg.solve(factor.T, noise[rows].T).T
        return out

    def draws(self, number: int = 1000, *, seed: int | None = None) -> dict[str, np.ndarray]:
        """Draws in natural units: name -> (number, *shape).

        Parameters
        ----------
        number : int
        seed : int, optional
            The same seed gives the same draws; the fit's seed where none is given.
        """
        if not isinstance(number, (int, np.integer)) or number < 1:
            raise DeclarationError(
                sentence("the number of draws must be a positive whole number", repr(number))
            )
        return self.problem.natural(self.draws_z(int(number), seed=seed))

    def log_density(self, values: Mapping[str, Any]) -> float:
        """Log density of the Gaussian posterior at natural values, in natural units [nats].

        Raises
        ------
        DeclarationError
            A parameter is missing or unknown.
        """
        names = [block.name for block in self.problem.layout.blocks]
        for name in (*values, *names):
            if name not in names or name not in values:
                raise DeclarationError(
                    f"log_density needs the parameters {', '.join(names)}; {name!r} is "
                    f"{'unknown' if name not in names else 'missing'}.{near_name(name, names)}"
                )
        z = self.problem.unconstrained(values)
        pieces = [
            share - 0.5 * (z - m.z) @ m.hessian @ (z - m.z) + 0.5 * np.linalg.slogdet(m.hessian)[1]
            for share, m in zip(np.log(self.mode_weights), self.modes, strict=True)
        ]
        jacobian = float(self.problem.prior_part(z).log_jacobian)
        return float(log_sum_exp(pieces) - 0.5 * len(z) * LOG_2PI - jacobian)

    @functools.cached_property
    def _table_draws(self) -> dict[str, np.ndarray]:
        return self.draws(TABLE_DRAWS)

    @property
    def mean(self) -> dict[str, np.ndarray]:
        """Posterior means by name [natural units]."""
        return {k: v.mean(axis=0) for k, v in self._table_draws.items()}

    @property
    def sd(self) -> dict[str, np.ndarray]:
        """Posterior standard deviations by name [natural units]."""
        return {k: v.std(axis=0, ddof=1) for k, v in self._table_draws.items()}

    def rows(self) -> list[dict[str, Any]]:
        """One plain dict per scalar parameter; the keys are those of COLUMNS."""
        model, rows = self.problem.model, []
        for label, name, index in self.problem.layout.entries():
            draws = self._table_draws[name][(slice(None), *index)]
            low, high = np.quantile(draws, INTERVAL)
            rows.append(
                {
                    "parameter": label,
                    "unit": model.units.get(name, ""),
                    "mode": float(self.modes[0].mode[name][index]),
                    "mean": float(draws.mean()),
                    "sd": float(draws.std(ddof=1)),
                    "low": float(low),
                    "high": float(high),
                    "note": model.notes.get(name, ""),
                }
            )
        return rows

    def table(self) -> Any:
        """Mode, mean, sd and 95 % interval of each parameter as a pandas table."""
        return _frame(self.rows())

    def correlations(self) -> Any:
        """Correlations of the parameters in natural units, by draws: pandas (p, p)."""
        import pandas as pd

        entries = list(self.problem.layout.entries())
        columns = {
            label: self._table_draws[name][(slice(None), *index)] for label, name, index in entries
        }
        return pd.DataFrame(columns).corr()

    def to_arviz(self, number: int = 4000, *, seed: int | None = None) -> Any:
        """Draws for arviz: InferenceData below arviz 1, DataTree from 1 on; one chain."""
        with warnings.catch_warnings():
            # arviz 0.23 announces its next version once a day, when it is imported
            warnings.simplefilter("ignore", FutureWarning)
            import arviz

        chain = {k: v[None] for k, v in self.draws(number, seed=seed).items()}
        # by its version: from 1 on the old name's lookup warns
        if int(arviz.__version__.split(".")[0]) < 1:
            return arviz.from_dict(posterior=chain)
        return arviz.from_dict({"posterior": chain})

    def shifted(self) -> dict[str, float]:
        """Parameters whose 95 % interval the audit's draws put elsewhere.

        Returns
        -------
        dict
            Label -> shift of the farther end in Gaussian sd, where that is above 0.25 and three
            times what the draws' number leaves open; empty where no audit accepted any.
        """
        if self.weighted is None or self.source == "refined" or self.refined is None:
            return {}
        chance = np.sqrt(INTERVAL[0] * INTERVAL[1] / self.weighted.effective) / END_DENSITY
        found = {}
        for row, other in zip(self.rows(), self.refined.rows(), strict=True):
            ends = [(r["low"], r["high"]) for r in (row, other)]
            shift = interval_shift(*ends, row["sd"])
            if shift > max(SHIFTED, 3.0 * chance):
                found[row["parameter"]] = shift
        return found

    @property
    def summary(self) -> str:
        """One sentence; another where the Gaussian's intervals are off (see :meth:`shifted`)."""
        pieces = [f"{r['parameter']} {r['mean']:.4g} (sd {r['sd']:.2g})" for r in self.rows()[:6]]
        kind = "refined" if self.source == "refined" else "Gaussian"
        return f"{kind} posterior: " + ", ".join(pieces) + _off(self.shifted())

    def marginals(self) -> list[dict[str, Any]]:
        """Histograms of each scalar parameter, Gaussian and refined, as plain lists.

        Returns
        -------
        list of dict
            ``parameter``, ``unit``, and what :func:`evidence.marginals.marginal` gives [natural
            units]; the first 30 parameters.
        """
        refined = None if self.refined is None else self.refined._table_draws
        effective = np.inf if self.weighted is None else self.weighted.effective
        found = []
        for label, name, index in list(self.problem.layout.entries())[:MARGINALS]:
            place = (slice(None), *index)
            better = None if refined is None else refined[name][place]
            histograms = marginal(self._table_draws[name][place], better, effective=effective)
            unit = self.problem.model.units.get(name, "")
            found.append({"parameter": label, "unit": unit, **histograms})
        return found

    def plot(self) -> Any:
        """Marginals, Gaussian against refined, as a matplotlib figure."""
        from evidence.report.figures.marginals import marginals

        return marginals(dataclasses.replace(self, source="gaussian").marginals())

    def __repr__(self) -> str:
        return _text(self.rows(), self.source)

    def _repr_html_(self) -> str:
        return self.table().to_html(index=False, escape=True, float_format="{:.4g}".format)


@dataclasses.dataclass(frozen=True)
class RecordedPosterior:
    """The posterior's table as read back from a saved result; draws are not saved."""

    recorded: Sequence[Mapping[str, Any]]

    def rows(self) -> list[dict[str, Any]]:
        """One plain dict per scalar parameter."""
        return [dict(row) for row in self.recorded]

    def table(self) -> Any:
        """Mode, mean, sd and 95 % interval of each parameter as a pandas table."""
        return _frame(self.rows())

    def draws(self, number: int = 1000, *, seed: int | None = None) -> dict[str, np.ndarray]:
        """Not available: raises DeclarationError."""
        raise DeclarationError(
            f"{number} draws (seed {seed}) cannot be made from a saved result, which holds the "
            "table only. Weigh the study again."
        )

    def __repr__(self) -> str:
        return _text(self.rows(), "recorded")


def _off(shifted: Mapping[str, float]) -> str:
    """Tell of the Gaussian's intervals that the refined ones contradict."""
    if not shifted:
        return ""
    worst = sorted(shifted, key=lambda name: -shifted[name])
    named = ", ".join(f"{name} ({shifted[name]:.1f} sd)" for name in worst[:4])
    more = f" and {len(worst) - 4} more" if len(worst) > 4 else ""
    return f". The refined intervals differ from the Gaussian ones: {named}{more}; see .refined"


def _frame(rows: list[dict[str, Any]]) -> Any:
    import pandas as pd

    # a saved result has None where there is no number
    plain = [{key: np.nan if value is None else value for key, value in r.items()} for r in rows]
    frame = pd.DataFrame(plain, columns=list(COLUMNS))
    frame.attrs["columns"] = dict(COLUMNS)
    return frame


def _text(rows: list[dict[str, Any]], source: str) -> str:
    lines = [f"Posterior ({source}): mean, sd, 95 % interval"]
    lines += [
        f"  {r['parameter']}: {r['mean']:.5g}, {r['sd']:.3g}, {r['low']:.5g} to {r['high']:.5g}"
        + (f" {r['unit']}" if r["unit"] else "")
        for r in rows[:10]
    ]
    if len(rows) > 10:
        lines.append(f"  and {len(rows) - 10} more: .table()")
    return "\n".join(lines)
