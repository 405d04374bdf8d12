"""The allocation-and-control program: its statement, and the fast way to its optimum."""

from .assigner import Assigner
from .assigning import assign
from .assignment import Assignment
from .control import Control, ControlProblem, solve_control
from .pricing import least_effort, price
from .problem import Problem
from .safety import Safety, SafetyRows

__all__ = [
    "Assigner",
    "Assignment",
    "Control",
    "ControlProblem",
    "Problem",
    "Safety",
    "SafetyRows",
    "assign",
    "least_effort",
    "price",
    "solve_control",
]
