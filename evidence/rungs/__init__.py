"""Independent checks of a log evidence: one file per method, and the ladder that climbs them."""
