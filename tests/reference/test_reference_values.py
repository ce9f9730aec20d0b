"""The generator of the reference values: it reproduces what is stored, and known closed forms."""

from __future__ import annotations

import make_values
import mpmath as mp
import pytest
from references import stored


def test_generator_reproduces_the_stored_values():
    assert make_values.make() == stored("values.json")


def test_more_digits_change_nothing():
    """The stored 20 digits are all right: 80 digits give the same."""
    again, known = make_values.make(80), stored("values.json")
    assert {**again, "digits": 0} == {**known, "digits": 0}


def test_low_precision_is_refused():
    with pytest.raises(ValueError, match="at least 16 digits"):
        make_values.make(15)


@pytest.mark.parametrize("n", [1, 5, 10, 50])
def test_stirling_series(n):
    """OEIS A001163 and A001164: the remainder is bounded by the next term."""
    with mp.workdps(50):
        terms = [1, mp.mpf(1) / 12, mp.mpf(1) / 288, mp.mpf(-139) / 51840, mp.mpf(-571) / 2488320]
        made = make_values.gamma_in_t(n)
        assert made["second_order_term"] == pytest.approx(float(terms[1] / n), rel=1e-14)
        ratio = mp.exp(made["log_integral"] - made["laplace"])
        for used in (2, 3, 4):
            left = ratio - sum(t / mp.mpf(n) ** k for k, t in enumerate(terms[:used]))
            # n = 1 needs the two next terms: the series is asymptotic
            bound = abs(terms[used]) / mp.mpf(n) ** used
            assert abs(left) <= (2 if n == 1 else 1.2) * bound


def test_regression_evidence_against_scipy():
    """The normal inverse gamma formula, by the Student t density of the data."""
    import numpy as np
    from scipy import stats

    rows, y = [[1, 2], [1, 3], [1, 5], [1, 7]], [1.0, 2.0, 2.5, 4.0]
    made = float(make_values.normal_inverse_gamma(rows, y, 100, 1, 2)["log_integral"])
    shape = 2.0 * (np.eye(4) + 100.0 * np.array(rows) @ np.array(rows).T)
    known = stats.multivariate_t(np.zeros(4), shape, df=2).logpdf(y)
    assert made == pytest.approx(known, abs=1e-9)


def test_gaussian_gamma_gap_against_quadrature():
    """The gap and c of one Gaussian coordinate with its log variance, by the plain definition."""
    shape, m = mp.mpf(12), 1
    made = make_values.gaussian_gamma(shape, m)
    inner = mp.quad(lambda v: mp.exp(-shape * (v + mp.exp(-v)) + m * v / 2), [-4, -1, 0, 1, 4, 12])
    laplace = -shape + mp.log(2 * mp.pi / shape) / 2
    assert float(made["gap"]) == pytest.approx(float(mp.log(inner) - laplace), abs=1e-12)
    for larger in (40, 400):
        made = make_values.gaussian_gamma(larger, m)
        assert abs(made["gap"] - made["second_order_term"]) < 2 * made["second_order_term"] ** 2
