"""rehearse(): draw parameters, simulate, weigh all candidates on each, for several sizes."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from evidence.approximation import check_options
from evidence.batches.batch import Batch
from evidence.batches.driver import weigh_many
from evidence.candidates import candidates_of
from evidence.complaints import DataError, DeclarationError, near_name, sentence
from evidence.model import Model
from evidence.rehearsal.counting import SizeRun
from evidence.rehearsal.designs import Design, checked_sizes, designs_of
from evidence.rehearsal.result import FailedDraw, Rehearsal
from evidence.report.progress import ProgressLine
from evidence.simulation import Columns, draw_prior, finite_draws, respond
from evidence.study import Study

__all__ = ["rehearse"]


def rehearse(
    models: Sequence[Model] | Study,
    design: Any = None,
    *,
    repeats: int,
    seed: int = 0,
    sizes: Sequence[int] | None = None,
    from_posterior: Mapping[str, Any] | None = None,
    store: str | Path | None = None,
    depth: str = "quick",
    client: Any = None,
    progress: Callable[[str], None] | None = None,
) -> Rehearsal:
    """Find out whether a design can tell the candidates apart, and whether probabilities hold.

    Parameters
    ----------
    models : sequence of Model, or Study
        At least two, each with `simulate`.
    design : mapping of arrays, DataFrame, xarray Dataset, or callable
        What is fixed before any response is seen: named arrays without the response (columns that
        the candidates simulate are replaced), or a function from a number of observations to such
        arrays. The data of a study where nothing is given.
    repeats : int
        Data sets simulated from each candidate at each size.
    seed : int
        The same seed gives the same digits. Every size has draws of its own.
    sizes : sequence of int, optional
        Numbers of observations. The rows of named arrays are thinned evenly or repeated, see
        :mod:`evidence.rehearsal.designs`; the design as it is where not given.
    from_posterior : Weighing, optional
        Draw parameters from the posterior of each candidate in place of its prior: what another
        such data set would say. The probabilities' calibration is then no check.
    store : path, optional
        Folder in which finished parts are kept: the same call goes on where it was stopped, and
        sizes may be added. Needs the extra ``batch``.
    depth : {"none", "quick", "standard", "thorough"}
        As for :func:`evidence.weigh_many`.
    client : dask.distributed.Client, optional
        Where to weigh, in place of the threads of this process.
    progress : callable, optional
        Told in a few words how far it is; by default a line on the terminal says so.

    Returns
    -------
    Rehearsal

    Raises
    ------
    DeclarationError
        Candidates or options are declared wrongly, a candidate has no `simulate`, repeats or a
        size is no whole number from 1 on.
    DataError
        Every simulation of a size failed, or the store belongs to another run.

    References
    ----------
    Schad, Nicenboim, Buerkner, Betancourt & Vasishth (2023), Psychological Methods 28:1404, on
    simulation-based calibration of Bayes factors, after Talts et al. (2018), arXiv:1804.06788.
    """
    candidates = _checked(models, repeats, seed, depth)
    chosen = checked_sizes(sizes)
    if design is None and isinstance(models, Study):
        design = models.data
    designs = designs_of(candidates, design, chosen)
    source = _Source(candidates, repeats, seed, from_posterior)
    if progress is None:
        with ProgressLine() as line:
            runs = _runs(candidates, designs, source, line, store, depth, client)
    else:
        runs = _runs(candidates, designs, source, progress, store, depth, client)
    return Rehearsal(
        candidates=tuple(model.name for model in candidates),
        runs=tuple(run for run, _ in runs),
        failures=tuple(failure for _, failed in runs for failure in failed),
        repeats=int(repeats),
        seed=int(seed),
        depth=depth,
        from_posterior=from_posterior is not None,
    )


class _Source:
    """Where parameters come from: each candidate's prior, or its posterior."""

    def __init__(
        self, models: Sequence[Model], repeats: int, seed: int, posteriors: Mapping[str, Any] | None
    ) -> None:
        self.models, self.repeats, self.seed = models, int(repeats), int(seed)
        self.posteriors = posteriors
        if posteriors is not None:
            for model in models:
                _check_posterior(model.name, posteriors)

    def parameters(self, place: int, design: Design) -> Columns:
        """Name -> (repeats, *shape) for one candidate."""
        model = self.models[place]
        if self.posteriors is None:
            seed = [self.seed, 0x4E, design.size, place]
            return draw_prior(model, design.columns, self.repeats, seed=seed)
        result = self.posteriors[model.name]
        if result.dimension == 0:
            return {}
        refined = result.posterior.refined
        drawn = result.posterior if refined is None else refined
        seed = np.random.SeedSequence([self.seed, design.size, place]).generate_state(1)[0]
        return drawn.draws(self.repeats, seed=int(seed))

    def simulated(self, place: int, design: Design) -> tuple[Columns, Columns]:
        """Parameters, and the data simulated at them: column -> (repeats, ...)."""
        model, values = self.models[place], self.parameters(place, design)
        seed = [self.seed, 0x4F, design.size, place]
        found = respond(model, values, design.columns, self.repeats, seed=seed,
                        parts=("simulated",))  # fmt: skip
        return values, found["simulated"]


def _runs(
    models: Sequence[Model],
    designs: Sequence[Design],
    source: _Source,
    progress: Callable[[str], None],
    store: str | Path | None,
    depth: str,
    client: Any,
) -> list[tuple[SizeRun, list[FailedDraw]]]:
    found = []
    for design in designs:
        began = time.perf_counter()
        ahead = f"{design.size} observations" if len(designs) > 1 else "rehearsal"
        progress(f"{ahead}: simulating")
        columns, usable, failures = _simulate(models, design, source)
        batch = weigh_many(
            models,
            columns,
            shared=design.columns,
            store=None if store is None else Path(store) / f"size_{design.size}",
            depth=depth,
            seed=source.seed,
            client=client,
            progress=lambda words, ahead=ahead: progress(f"{ahead}: {words}"),
        )
        run = _collect(batch, design.size, usable)
        found.append((run, failures))
        progress(f"{ahead}: done in {time.perf_counter() - began:.0f} s")
    return found


def _simulate(
    models: Sequence[Model], design: Design, source: _Source
) -> tuple[Columns, np.ndarray, list[FailedDraw]]:
    """Stacked data sets, generator by generator; which are usable (K, R); which are not, why."""
    repeats = source.repeats
    stacked = {
        column: np.empty((len(models) * repeats, *shape), dtype)
        for column, (shape, dtype) in design.responses.items()
    }
    usable, failures = np.ones((len(models), repeats), bool), []
    for place, model in enumerate(models):
        values, drawn = source.simulated(place, design)
        usable[place], reasons = finite_draws(drawn, repeats)
        for column, values_drawn in drawn.items():
            stacked[column][place * repeats : (place + 1) * repeats] = values_drawn
        for k in np.flatnonzero(~usable[place]):
            failures.append(
                FailedDraw(model.name, design.size, int(k), reasons[k], _at(values, int(k)))
            )
    if not usable.any():
        raise DataError(
            sentence(
                f"every simulated data set of {design.size} observations has nan or inf",
                failures[0].reason,
                "Look at simulate= and at the priors' scales with ev.prior_predictive(model, ...)",
            )
        )
    return stacked, usable, failures


def _at(values: Columns, place: int) -> str:
    """Parameters of one draw in short."""
    shown = []
    for name, array in list(values.items())[:6]:
        value = array[place]
        shown.append(f"{name} {value:.4g}" if np.ndim(value) == 0 else f"{name} {value.shape}")
    return ", ".join(shown)


def _collect(batch: Batch, size: int, usable: np.ndarray) -> SizeRun:
    models, repeats = usable.shape
    parts = list(batch.parts())

    def block(pieces: list[np.ndarray]) -> np.ndarray:
        joined = np.concatenate(pieces)
        return joined.reshape(models, repeats, *joined.shape[1:])

    return SizeRun(
        size=size,
        usable=usable,
        log_evidence=block([part.log_evidence for part in parts]),
        standard_error=block([part.standard_error for part in parts]),
        probability=block([part.probability for part in parts]),
        trust=block([part.trust for part in parts]),
    )


def _checked(models: Any, repeats: Any, seed: Any, depth: Any) -> list[Model]:
    check_options(depth, seed)
    candidates = candidates_of(models)
    whole = isinstance(repeats, int | np.integer) and not isinstance(repeats, bool)
    if not whole or repeats < 1:
        raise DeclarationError(
            sentence("repeats must be a whole number from 1 on", repr(repeats), "Type: repeats=200")
        )
    if len(candidates) < 2:
        raise DeclarationError(
            sentence("a rehearsal needs at least two candidates", f"{candidates[0].name!r} alone")
        )
    for model in candidates:
        if model.simulate is None:
            raise DeclarationError(
                sentence(
                    f"{model.name!r} cannot be rehearsed",
                    "no simulate=",
                    "Type: ev.Model(..., simulate=lambda key, p, data: {'y': ...sample(key)})",
                )
            )
    return candidates


def _check_posterior(name: str, posteriors: Any) -> None:
    if not isinstance(posteriors, Mapping) or name not in posteriors:
        known = list(posteriors) if isinstance(posteriors, Mapping) else []
        raise DeclarationError(
            sentence(
                f"from_posterior must be a weighing with a posterior of {name!r}",
                ", ".join(map(repr, known)) or type(posteriors).__name__,
            )
            + near_name(name, known)
        )
    result = posteriors[name]
    if result.problem is None or (result.posterior is None and result.dimension > 0):
        raise DeclarationError(
            f"from_posterior holds no draws of {name!r}: "
            + ("a saved weighing keeps tables only" if result.problem is None else "it failed")
            + ". Weigh it again, or leave from_posterior= out."
        )
