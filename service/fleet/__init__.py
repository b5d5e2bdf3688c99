"""Pooling of the factors of one probe over flights, and whether the probe has changed. Pure computation."""
