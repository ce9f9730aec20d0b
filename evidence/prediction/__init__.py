"""Predictions: from the priors before any data, and averaged over candidates after them."""

from evidence.prediction.blending import Blend, blend
from evidence.prediction.priors import PriorPredictive, prior_predictive

__all__ = ["Blend", "PriorPredictive", "blend", "prior_predictive"]
