"""Bundles for movers that decide from a robot's filter."""

from tests.shipping import shipped

__all__ = ["shipped"]
