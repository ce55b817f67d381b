"""Is this scan fit to be a reference? Findings about what was done to it."""

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.inspect import CHECKS, Inspection, inspect_fully, inspect_scan

__all__ = ["CHECKS", "Finding", "Inspection", "inspect_fully", "inspect_scan"]
