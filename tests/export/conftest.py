"""A bundle of every kind, written once."""

from tests.shipping import shipped

__all__ = ["shipped"]
