"""Split Student-t components and their mixtures: densities, and draws from uniforms."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import gammaincinv, gammaln, ndtri

from evidence.rungs.quasirandom import uniform_points
from evidence.rungs.weights import log_sum_exp

__all__ = ["Component", "Mixture", "component"]

DEGREES_OF_FREEDOM = 5.0


@dataclass(frozen=True, kw_only=True)
class Component:
    """A Student-t with one chi-square for all axes and its own scale on each side of each axis.

    Attributes
    ----------
    centre : [d] location, unconstrained coordinates
    axes : [d, d] columns are the axes, one scale long
    inverse : [d, d] inverse of ``axes``
    below, above : [d] factors on the scale on either side of the centre (Geweke 1989)
    degrees : degrees of freedom
    log_norm : log of the normalising constant [nats]
    """

    centre: np.ndarray
    axes: np.ndarray
    inverse: np.ndarray
    below: np.ndarray
    above: np.ndarray
    degrees: float
    log_norm: float

    def whiten(self, z: np.ndarray) -> np.ndarray:
        """Return coordinates [n, d] along the axes, in units of the side's scale."""
        u = (z - self.centre) @ self.inverse.T
        return u / np.where(u < 0.0, self.below, self.above)

    def log_density(self, z: np.ndarray) -> np.ndarray:
        """Return the normalised log density [n] in nats at points [n, d]."""
        u = self.whiten(z)
        with np.errstate(over="ignore"):
            radius = np.einsum("nd,nd->n", u, u)
        power = 0.5 * (self.degrees + len(self.centre))
        return self.log_norm - power * np.log1p(radius / self.degrees)

    def draw(self, uniforms: np.ndarray) -> np.ndarray:
        """Map uniforms [n, d + 1] to draws [n, d]; the first column sets the chi-square."""
        chi_square = 2.0 * gammaincinv(0.5 * self.degrees, uniforms[:, 0])
        stretch = np.sqrt(self.degrees / np.maximum(chi_square, 1e-300))
        position = uniforms[:, 1:]
        mass_below = self.below / (self.below + self.above)
        below = position < mass_below
        upper = 0.5 + 0.5 * (position - mass_below) / (1.0 - mass_below)
        normal = ndtri(np.where(below, 0.5 * position / mass_below, np.minimum(upper, 1 - 1e-16)))
        steps = normal * np.where(below, self.below, self.above) * stretch[:, None]
        return self.centre + steps @ self.axes.T


def component(
    centre: np.ndarray,
    axes: np.ndarray,
    *,
    below: np.ndarray | None = None,
    above: np.ndarray | None = None,
    degrees: float = DEGREES_OF_FREEDOM,
) -> Component:
    """Build a component from its centre [d] and axes [d, d].

    Raises
    ------
    numpy.linalg.LinAlgError
        If the axes do not span the space.
    """
    d = len(centre)
    below = np.ones(d) if below is None else below
    above = np.ones(d) if above is None else above
    log_volume = np.linalg.slogdet(axes)[1] + np.sum(np.log(0.5 * (below + above)))
    half = 0.5 * (degrees + d)
    log_norm = gammaln(half) - gammaln(0.5 * degrees) - 0.5 * d * np.log(degrees * np.pi)
    return Component(
        centre=np.asarray(centre, dtype=float),
        axes=axes,
        inverse=np.linalg.inv(axes),
        below=below,
        above=above,
        degrees=degrees,
        log_norm=float(log_norm - log_volume),
    )


@dataclass(frozen=True, kw_only=True)
class Mixture:
    """Components and their weights.

    Attributes
    ----------
    components : the parts
    shares : [k] their weights, which sum to 1
    broad : [k] True for the parts on the prior's scale
    """

    components: tuple[Component, ...]
    shares: np.ndarray
    broad: np.ndarray

    @classmethod
    def of(
        cls, components: Sequence[Component], weights: np.ndarray, broad: np.ndarray | None = None
    ) -> Mixture:
        """Build a mixture from weights [k] that need not sum to 1."""
        weights = np.asarray(weights, dtype=float)
        broad = np.zeros(len(weights), dtype=bool) if broad is None else np.asarray(broad, bool)
        return cls(components=tuple(components), shares=weights / weights.sum(), broad=broad)

    def joined(self, other: Mixture, share: float) -> Mixture:
        """Return this mixture with ``other`` as a part of weight ``share``."""
        weights = np.concatenate([self.shares * (1.0 - share), other.shares * share])
        broad = np.concatenate([self.broad, other.broad])
        return Mixture.of(self.components + other.components, weights, broad)

    def narrow(self) -> Mixture:
        """Return the mixture without its broad parts (itself if nothing else is in it)."""
        if self.broad.all():
            return self
        kept = [c for c, broad in zip(self.components, self.broad, strict=True) if not broad]
        return Mixture.of(kept, self.shares[~self.broad])

    def counts(self, n: int) -> np.ndarray:
        """Split n draws over the components [k], at least two each."""
        counts = np.maximum(np.floor(self.shares * n).astype(int), 2)
        counts[np.argmax(counts)] += n - counts.sum()
        return np.maximum(counts, 1)

    def at_counts(self, counts: np.ndarray) -> Mixture:
        """Return the mixture whose shares are the ones really drawn."""
        return replace(self, shares=counts / counts.sum())

    def log_parts(self, z: np.ndarray) -> np.ndarray:
        """Return log(share x density) [k, n] in nats."""
        parts = np.stack([c.log_density(z) for c in self.components])
        return parts + np.log(self.shares)[:, None]

    def log_density(self, z: np.ndarray) -> np.ndarray:
        """Return the log density [n] in nats at points [n, d]."""
        return log_sum_exp(self.log_parts(z), axis=0)

    def draw(self, counts: np.ndarray, rng: np.random.Generator, replicates: int) -> np.ndarray:
        """Return stratified quasi-random draws [replicates, sum(counts), d]."""
        d = len(self.components[0].centre)
        parts = []
        for part, count in zip(self.components, counts, strict=True):
            u = uniform_points(int(count), d + 1, rng, replicates=replicates)
            parts.append(part.draw(u.reshape(-1, d + 1)).reshape(replicates, int(count), d))
        return np.concatenate(parts, axis=1)
