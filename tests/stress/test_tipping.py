"""Root and nearest point on surfaces whose answers are known."""

from __future__ import annotations

import numpy as np
import pytest

from evidence.stress.tipping import LIMIT, nearest_point, nearest_root


def test_the_nearer_of_two_roots_is_found():
    root = nearest_root(lambda x: (x + 0.5) * (2.0 - x))
    assert root.step == pytest.approx(-0.5, abs=1e-9)


def test_a_root_that_is_nearer_by_less_than_the_grid():
    root = nearest_root(lambda x: (x + 0.60) * (0.55 - x))
    assert root.step == pytest.approx(0.55, abs=1e-9)


@pytest.mark.parametrize("distance", [4.5, LIMIT - 1e-6])
def test_roots_are_found_up_to_the_limit(distance):
    assert nearest_root(lambda x: distance - x).step == pytest.approx(distance, abs=1e-8)


def test_beyond_a_factor_of_100_there_is_none():
    assert np.isnan(nearest_root(lambda x: LIMIT + 0.01 - x).step)
    assert np.isnan(nearest_root(lambda x: 1.0 + 0.0 * x).step)


def test_a_side_on_which_nothing_can_be_computed_is_told():
    root = nearest_root(lambda x: np.nan if x > 1.0 else 2.0 + x)
    assert root.step == pytest.approx(-2.0, abs=1e-9)
    assert root.lost_at == pytest.approx(np.log(5.0))


def check_nearest(lead, slopes, first, expected):
    found = nearest_point(lead, slopes, np.array(first, dtype=float))
    assert lead(found) == pytest.approx(0.0, abs=1e-8)
    np.testing.assert_allclose(found, expected, atol=2e-3)


def test_nearest_point_of_a_plane():
    normal = np.array([1.0, -2.0, 0.5])
    check_nearest(
        lambda u: 2.0 - normal @ u, lambda u: -normal, np.zeros(3), 2.0 * normal / (normal @ normal)
    )


def test_nearest_point_of_an_ellipse():
    """1.5 - x^2 - y^2/4 along each axis: the nearest point lies on the short one."""
    check_nearest(
        lambda u: 1.5 - (u[0] - 0.2) ** 2 - u[1] ** 2 / 4,
        lambda u: np.array([-2 * (u[0] - 0.2), -u[1] / 2]),
        [0.0, 0.0],
        [0.2 - np.sqrt(1.5), 0.0],
    )


def test_nearest_point_is_never_farther_than_the_single_root():
    def lead(u):
        return 1.0 - u[0] - 0.3 * u[1] - 0.4 * u[0] * u[1]

    def slopes(u):
        return np.array([-1.0 - 0.4 * u[1], -0.3 - 0.4 * u[0]])

    found = nearest_point(lead, slopes, np.array([1.0, 0.0]))
    assert abs(lead(found)) < 1e-8
    assert np.linalg.norm(found) < 1.0
    # where it is nearest, the change points along the slope
    slope = slopes(found)
    assert found @ slope / np.linalg.norm(found) / np.linalg.norm(slope) == pytest.approx(
        -1, abs=1e-3
    )


def test_no_point_within_the_limit():
    found = nearest_point(lambda u: 9.0 - u[0], lambda u: np.array([-1.0, 0.0]), np.zeros(2))
    assert np.all(np.isnan(found))
