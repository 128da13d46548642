"""Uncertainty budgets and conformity decisions: pure functions and frozen dataclasses, no I/O."""
