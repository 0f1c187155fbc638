"""Airborne gravity gradiometry: from flight lines to levelled maps and a density model."""

__version__ = "0.1.0"
