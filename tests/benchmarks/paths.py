"""Lets a benchmark be run as a script: the package and the tests' builders are found."""

import sys
from pathlib import Path

HERE = Path(__file__).resolve()
sys.path[:0] = [str(HERE.parents[2]), str(HERE.parents[1])]
