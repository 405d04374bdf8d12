"""How messages about files name places, values and choices."""

from __future__ import annotations

import difflib
import json
import re
from collections.abc import Iterable, Mapping
from typing import Any

LONGEST_LIST = 12
"""Choices a message lists before it only counts them."""


def dotted(place: tuple[str | int, ...]) -> str:
    """Write a place as in ``robots.rover_1.health[0].feature``."""
    text = ""
    for step in place:
        if isinstance(step, int):
            text += f"[{step}]"
        else:
            plain = re.fullmatch(r"[\w-]+", step)
            text += ("." if text else "") + (step if plain else quoted(step))
    return text


def described(value: Any) -> str:
    """Say what a value is, in one line."""
    if value is None:
        return "nothing"
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, int | float):
        return repr(value)
    if isinstance(value, str):
        return f"the text {quoted(value)}"
    kind, part = ("mapping", "key") if isinstance(value, Mapping) else ("list", "entry")
    return f"a {kind} with {counted(len(value), part)}" if value else f"an empty {kind}"


def counted(count: int, word: str) -> str:
    """Write a number of things."""
    several = f"{word[:-1]}ies" if word == "entry" else f"{word}s"
    return f"{count} {word if count == 1 else several}"


def one_of(choices: Iterable[str], word: object = None) -> str:
    """Say what may stand there; for a near miss also which one was probably meant."""
    choices = sorted(choices)
    if not choices:
        return "must be left out: there is none to choose from"
    if len(choices) == 1:
        return f"must be {choices[0]}, the only one there is"
    listed = ", ".join(choices[:LONGEST_LIST])
    more = f", ... ({len(choices)} in all)" if len(choices) > LONGEST_LIST else ""
    text = word if isinstance(word, str) else ""
    near = difflib.get_close_matches(text, choices, n=1, cutoff=0.7)
    return f"must be one of {listed}{more}" + (f" (did you mean {near[0]}?)" if near else "")


def quoted(text: str) -> str:
    """Put a text in quotes, in one line and not too long."""
    return json.dumps(text if len(text) <= 40 else text[:37] + "...", ensure_ascii=False)
