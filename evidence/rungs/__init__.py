"""Independent checks of a log evidence: one file per method, and the ladder that climbs them."""

from evidence.rungs.ladder import climb

__all__ = ["climb"]
