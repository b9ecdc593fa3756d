"""Conditions compared with their reference: ratios, tests, and what a comparison costs."""

from glidefit.steps.compare.checks import FilmedAt
from glidefit.steps.compare.ratios import compare, pairs_to_compare

__all__ = ["FilmedAt", "compare", "pairs_to_compare"]
