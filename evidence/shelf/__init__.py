"""Ready parts: functions that return a :class:`evidence.Model` for common cases.

Each states its density and its default priors. Defaults are without a unit where that is possible;
where a prior must know the unit of a column, the function asks for a number in that unit, to be
stated before the data are looked at. Every prior can be replaced (``priors=``) and every parameter
held at a value (``fixed=``).
"""

from evidence.shelf.curves import change_point, exponentials, saturation, sinusoid
from evidence.shelf.processes import gaussian_process
from evidence.shelf.regression import (
    linear_regression,
    logistic_regression,
    negative_binomial_regression,
    poisson_regression,
    standardise,
)

__all__ = [
    "change_point",
    "exponentials",
    "gaussian_process",
    "linear_regression",
    "logistic_regression",
    "negative_binomial_regression",
    "poisson_regression",
    "saturation",
    "sinusoid",
    "standardise",
]
