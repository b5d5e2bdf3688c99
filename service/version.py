"""Versions that every answer names."""

SERVICE = "0.1.0"
"""The release; `pyproject.toml` reads it from here."""

METHOD = "2"
"""Counts up whenever the same bytes and settings may give other numbers."""
