"""Could this design have told the candidates apart: simulate from each, weigh, count who leads."""

from evidence.rehearsal.driver import rehearse
from evidence.rehearsal.result import Rehearsal

__all__ = ["Rehearsal", "rehearse"]
