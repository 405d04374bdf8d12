"""Colours that colour-blind people tell apart, with hatches that tell them apart in grey.

Colours: M. Okabe and K. Ito, "Color Universal Design", 2008; the same eight as in
B. Wong, "Points of view: Color blindness", Nature Methods 8 (2011), 441.
"""

from __future__ import annotations

from dataclasses import dataclass

BLACK, GREY = "#000000", "#999999"
ORANGE, SKY, GREEN = "#E69F00", "#56B4E9", "#009E73"
YELLOW, BLUE, VERMILLION, PURPLE = "#F0E442", "#0072B2", "#D55E00", "#CC79A7"

COLOURS = (SKY, ORANGE, GREEN, YELLOW, BLUE, VERMILLION, PURPLE)
HATCHES = ("", "///", "...", "\\\\\\", "xxx", "---", "++")
LINES = ("-", "--", ":", "-.", (0, (5, 1)), (0, (1, 1)), (0, (3, 1, 1, 1)))
@dataclass(frozen=True)
class Look:
    """How one thing looks: colour and hatch of its areas, colour and style of its lines."""

    colour: str
    hatch: str
    stroke: str
    line: object


def look(number: int) -> Look:
    """Give the look of the thing with a number; the first 49 are all different."""
    count = len(COLOURS)
    colour, turn = COLOURS[number % count], (number + number // count) % count
    # Yellow is too light for a line on white.
    stroke = BLACK if colour == YELLOW else colour
    return Look(colour, HATCHES[turn], stroke, LINES[turn])
