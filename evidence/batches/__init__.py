"""Many data sets: a work queue in one compiled program, a store that survives, a cluster."""
