"""Before anybody drives: what a team would do, and what each loss would cost it."""

from .findings import Assumptions, Findings, inspect, weak_points

__all__ = ["Assumptions", "Findings", "inspect", "weak_points"]
