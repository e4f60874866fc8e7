"""Observation models under one contract, and what they are fitted to."""
