"""The parts of an answer that a caller may ask for."""

PARTS = ("airspeed", "stall_margins", "faults")
"""What `include` may name."""
