"""Sheet to a synthetic capture with known faults."""
