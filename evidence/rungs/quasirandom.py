"""Randomised low-discrepancy points in the unit cube, in NumPy alone.

The first coordinates come from a Sobol' sequence (Sobol' 1967, direction numbers of Joe & Kuo
2008) under a random linear scramble and a digital shift (Matousek 1998); further coordinates
are Latin hypercube columns (padding, Owen 1998). Every replicate is uniform in the cube by
itself, so that means over replicates are unbiased and their scatter is an honest error.
"""

from __future__ import annotations

import functools

import numpy as np

__all__ = ["uniform_points"]

BITS = 30
SMALLEST = 2.0**-31  # points are centred in their cells, never 0 or 1

# (primitive polynomial with all its coefficients as bits, initial direction numbers),
# Joe & Kuo (2008), table for search criterion D(6); the first coordinate is van der Corput's.
JOE_KUO = (
    (3, (1,)),
    (7, (1, 3)),
    (11, (1, 3, 1)),
    (13, (1, 1, 1)),
    (19, (1, 1, 3, 3)),
    (25, (1, 3, 5, 13)),
    (37, (1, 1, 5, 5, 17)),
    (41, (1, 1, 5, 5, 5)),
    (47, (1, 1, 7, 11, 19)),
    (55, (1, 1, 5, 1, 1)),
    (59, (1, 1, 1, 3, 11)),
    (61, (1, 3, 5, 5, 31)),
    (67, (1, 3, 3, 9, 7, 49)),
    (91, (1, 1, 1, 15, 21, 21)),
    (97, (1, 3, 1, 13, 27, 49)),
    (103, (1, 1, 1, 15, 7, 5)),
    (109, (1, 3, 1, 15, 13, 25)),
    (115, (1, 1, 5, 5, 19, 61)),
    (131, (1, 3, 7, 11, 23, 15, 103)),
    (137, (1, 3, 7, 13, 13, 15, 69)),
)
NET_COORDINATES = 1 + len(JOE_KUO)
_DIAGONAL = np.eye(BITS, dtype=np.uint8)
_BELOW_DIAGONAL = np.tri(BITS, k=-1, dtype=bool)
_PLACE_VALUES = 2 ** np.arange(BITS - 1, -1, -1, dtype=np.int64)


def uniform_points(
    n: int, dim: int, rng: np.random.Generator, *, replicates: int = 1
) -> np.ndarray:
    """Draw independent randomisations of n low-discrepancy points.

    Parameters
    ----------
    n : int
        Points per replicate; powers of two balance best.
    dim : int
        Dimension of the cube.
    rng : numpy.random.Generator
        Source of the scrambles.
    replicates : int
        Number of independent randomisations.

    Returns
    -------
    numpy.ndarray
        [replicates, n, dim], strictly inside the unit cube.
    """
    net = min(dim, NET_COORDINATES)
    points = _scrambled_nets(n, net, replicates, rng)
    if dim == net:
        return points
    padding = [_latin_hypercube(n, dim - net, rng) for _ in range(replicates)]
    return np.concatenate([points, np.stack(padding)], axis=2)


def _scrambled_nets(n: int, dim: int, replicates: int, rng: np.random.Generator) -> np.ndarray:
    """Return points [replicates, n, dim] of scrambled and shifted Sobol' sequences."""
    levels = max(int(n - 1).bit_length(), 1)
    columns = _scramble(_direction_bits()[:dim, :, :levels], replicates, rng)
    shift = rng.integers(0, 2**BITS, size=(replicates, 1, dim))
    numbers = shift  # the first point of a digital net is zero
    for level in range(levels):
        numbers = np.concatenate([numbers, numbers ^ columns[:, None, :, level]], axis=1)
    return (numbers[:, :n] + 0.5) * 2.0**-BITS


def _scramble(bits: np.ndarray, replicates: int, rng: np.random.Generator) -> np.ndarray:
    """Multiply generator matrices by random lower-triangular ones; columns as integers."""
    lower = rng.integers(0, 2, size=(replicates, len(bits), BITS, BITS), dtype=np.uint8)
    lower = np.where(_BELOW_DIAGONAL, lower, _DIAGONAL).astype(np.float32)
    mixed = (lower @ bits).astype(np.int64) & 1
    return np.einsum("rdbl,b->rdl", mixed, _PLACE_VALUES)


@functools.cache
def _direction_bits() -> np.ndarray:
    """Generator matrices [coordinate, bit, level], most significant bit first."""
    numbers = [[1 << (BITS - 1 - level) for level in range(BITS)]]
    numbers += [_direction_numbers(*row) for row in JOE_KUO]
    shifts = np.arange(BITS - 1, -1, -1)
    bits = (np.array(numbers, dtype=np.int64)[:, None, :] >> shifts[None, :, None]) & 1
    return bits.astype(np.float32)


def _direction_numbers(polynomial: int, initial: tuple[int, ...]) -> list[int]:
    """Continue direction numbers by the recurrence of a primitive polynomial."""
    degree = polynomial.bit_length() - 1
    numbers = [m << (BITS - 1 - i) for i, m in enumerate(initial)]
    for i in range(degree, BITS):
        value = numbers[i - degree] ^ (numbers[i - degree] >> degree)
        for k in range(1, degree):
            if (polynomial >> (degree - k)) & 1:
                value ^= numbers[i - k]
        numbers.append(value)
    return numbers


def _latin_hypercube(n: int, dim: int, rng: np.random.Generator) -> np.ndarray:
    """Return n points [n, dim], one in each of n slices of every coordinate."""
    if dim == 0:
        return np.empty((n, 0))
    slices = rng.permuted(np.tile(np.arange(n), (dim, 1)), axis=1).T
    return np.clip((slices + rng.random((n, dim))) / n, SMALLEST, 1 - SMALLEST)
