"""What would overturn a verdict: other priors, or fewer observations."""

from evidence.stress.observations import ObservationStress, stress_observations
from evidence.stress.priors import PriorStress, stress_priors

__all__ = ["ObservationStress", "PriorStress", "stress_observations", "stress_priors"]
