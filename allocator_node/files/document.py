"""A YAML document as plain objects that remember their lines.

Scalars follow YAML 1.2 (:mod:`allocator_node.files.scalars`). Aliases are fine; tags,
merge keys, keys that are not text and second documents are refused.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import yaml

from .scalars import resolved
from .wording import dotted, quoted

Place = tuple[str | int, ...]
"""Keys and list positions that lead to a value."""

LARGEST_FILE = 1_000_000
"""Characters a document may have."""

MOST_VALUES = 100_000
"""Values a document may have, aliases counted as often as they are used."""

DEEPEST = 16
"""Levels of lists and mappings within each other."""

_LOADER = getattr(yaml, "CSafeLoader", yaml.SafeLoader)
_UNPRINTABLE = re.compile(
    "[^\t\n\r\x20-\x7e\x85\xa0-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]"
)


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong in a file.

    Attributes:
        file: Name of the file.
        line: Line, counted from 1; 0 where the file could not be read at all.
        path: Way to the value, such as ``robots.rover_1.health[0].feature``.
        found: What stands there, to follow the word "found".
        allowed: What must stand there, as a sentence part.
    """

    file: str
    line: int
    path: str
    found: str
    allowed: str

    def __str__(self) -> str:
        where = f"{self.file}:{self.line}" if self.line else self.file
        parts = (where, self.path, f"found {self.found}; {self.allowed}")
        return " ".join(": ".join(filter(None, parts)).splitlines())


class FileError(Exception):
    """A file of the user's is wrong; nothing of it was taken.

    Attributes:
        problems: Every problem, in the order of the lines.
    """

    def __init__(self, problems: Iterable[Problem]) -> None:
        self.problems = tuple(sorted(problems, key=lambda problem: problem.line))
        super().__init__("\n".join(map(str, self.problems)))


@dataclass
class Document:
    """What a text holds, and what was found wrong in it so far.

    Attributes:
        file: Name for the messages.
        value: Dicts, tuples, strings, numbers, booleans and None.
        lines: Line of every value; within an alias only the line of the alias.
        problems: Problems so far; :meth:`finish` raises them.
    """

    file: str
    value: Any = None
    lines: dict[Place, int] = field(default_factory=dict)
    problems: list[Problem] = field(default_factory=list)

    def line(self, place: Place) -> int:
        """Give the line of a value, or of the nearest one around it."""
        while place and place not in self.lines:
            place = place[:-1]
        return self.lines.get(place, 1)

    def refuse(self, place: Place, found: str, allowed: str, line: int | None = None) -> None:
        """Add a problem, and go on."""
        where = self.line(place) if line is None else line
        self.problems.append(Problem(self.file, where, dotted(place), found, allowed))

    def finish(self) -> None:
        """Raise :class:`FileError` if anything was refused."""
        if self.problems:
            raise FileError(self.problems)


def read_document(path: str | Path) -> Document:
    """Read a file.

    Raises:
        FileError: If the file cannot be read or is not YAML.
    """
    def refused(line: int, found: str) -> FileError:
        return FileError([Problem(str(path), line, "", found, "must be a YAML file")])

    try:
        with open(path, "rb") as file:
            data = file.read(LARGEST_FILE + 1)
    except OSError as error:
        reason = error.strerror or type(error).__name__
        raise refused(0, f"no file that can be read ({reason})") from None
    if len(data) > LARGEST_FILE:
        raise refused(0, f"more than {LARGEST_FILE} bytes")
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data[: error.start].count(b"\n") + 1
        raise refused(line, "bytes that are not UTF-8 text") from None
    return parse_document(text, str(path))


def parse_document(text: str, name: str) -> Document:
    """Read a text.

    Raises:
        FileError: If the text is not YAML, too large, or too deep. Smaller
            problems are left in the document, so that those of its content can join.
    """
    document = Document(name)
    if len(text) > LARGEST_FILE:
        found = f"{len(text)} characters"
        document.refuse((), found, f"must be a file of at most {LARGEST_FILE} characters", line=1)
    elif bad := _UNPRINTABLE.search(text):
        line = text.count("\n", 0, bad.start()) + 1
        found = f"the control character U+{ord(bad.group()):04X}"
        document.refuse((), found, "must be taken out: a YAML file is plain text", line=line)
    if not document.problems:
        try:
            _Composer(text, document).compose()
            return document
        except yaml.MarkedYAMLError as error:
            mark = error.problem_mark or error.context_mark
            what = ", ".join(filter(None, (error.context, error.problem)))
            hint = "look at this line and the one above for indentation (spaces, no tabs), "
            document.refuse(
                (),
                f"a syntax error ({what})",
                f"must be valid YAML: {hint}colons, quotes and brackets",
                line=mark.line + 1 if mark else 1,
            )
        except _Hopeless:
            pass
    raise FileError(document.problems)


class _Hopeless(Exception):
    """The document cannot be read any further."""


@dataclass(frozen=True)
class _Anchored:
    """Attributes: a value with an anchor, its number of values, its levels."""

    value: Any
    size: int
    height: int


class _Composer:
    """Turns the events of a YAML parser into the value and the lines of a document."""

    def __init__(self, text: str, document: Document) -> None:
        self.events: Iterator[yaml.Event] = yaml.parse(text, Loader=_LOADER)
        self.document = document
        self.anchors: dict[str, _Anchored] = {}
        self.size = 0
        self.deepest = 0

    def compose(self) -> None:
        """Read the first document and refuse any other."""
        first = True
        for event in self.events:
            if isinstance(event, yaml.DocumentStartEvent):
                if not first:
                    allowed = "must be one document: take out everything from the '---' on"
                    self.document.refuse((), "a second document", allowed, _line(event))
                    return
                first = False
                self.document.value = self._value(next(self.events), ())

    def _value(self, event: yaml.Event, place: Place) -> Any:
        """Build one value; its events follow the given one."""
        self.document.lines.setdefault(place, _line(event))
        if isinstance(event, yaml.AliasEvent):
            return self._alias(event, place)
        self._grow(event, size=1, depth=len(place))
        size, deepest, self.deepest = self.size, self.deepest, len(place)
        if event.tag is not None:
            allowed = "must be written without a tag"
            self.document.refuse(place, f"the tag {quoted(event.tag)}", allowed, _line(event))
        if isinstance(event, yaml.SequenceStartEvent):
            value: Any = self._sequence(place)
        elif isinstance(event, yaml.MappingStartEvent):
            value = self._mapping(place)
        else:
            value = resolved(event.value, plain=event.implicit[0])
        if event.anchor is not None:
            height = self.deepest - len(place)
            self.anchors[event.anchor] = _Anchored(value, self.size - size + 1, height)
        self.deepest = max(self.deepest, deepest)
        return value

    def _sequence(self, place: Place) -> tuple[Any, ...]:
        items: list[Any] = []
        while not isinstance(event := next(self.events), yaml.SequenceEndEvent):
            items.append(self._value(event, (*place, len(items))))
        return tuple(items)

    def _mapping(self, place: Place) -> dict[str, Any]:
        mapping: dict[str, Any] = {}
        while not isinstance(event := next(self.events), yaml.MappingEndEvent):
            key = self._key(event, place)
            if key in mapping:
                first = self.document.line((*place, key))
                allowed = f"must be there once (the first is in line {first})"
                self.document.refuse((*place, key), "the key again", allowed, _line(event))
            if key is None:
                self._value(next(self.events), place)
                continue
            self.document.lines.setdefault((*place, key), _line(event))
            value = self._value(next(self.events), (*place, key))
            mapping.setdefault(key, value)
        return mapping

    def _key(self, event: yaml.Event, place: Place) -> str | None:
        """Give a key, or None where it is refused."""
        if not isinstance(event, yaml.ScalarEvent):
            found = "a key that is a list, mapping or alias"
            self.document.refuse(place, found, "must be text", _line(event))
            self._value(event, place)
            return None
        self._grow(event, size=1, depth=len(place))
        key = resolved(event.value, plain=event.implicit[0])
        if key == "<<" and event.implicit[0]:
            found, allowed = "the merge key <<", "must be left out: write the keys themselves"
        elif not isinstance(key, str):
            found, allowed = f"the key {event.value}", "must be text: put it in quotes"
            if isinstance(key, int | float):
                allowed += " (the decimal sign of a number is a point, no comma)"
        else:
            return key
        self.document.refuse(place, found, allowed, _line(event))
        return None

    def _alias(self, event: yaml.AliasEvent, place: Place) -> Any:
        anchored = self.anchors.get(event.anchor)
        if anchored is None:
            allowed = f"must stand after the value that is marked &{event.anchor}"
            self.document.refuse(place, f"the alias *{event.anchor}", allowed, _line(event))
            raise _Hopeless
        self._grow(event, anchored.size, len(place) + anchored.height)
        return anchored.value

    def _grow(self, event: yaml.Event, size: int, depth: int) -> None:
        """Count values and levels, and stop where they are too many."""
        self.size += size
        self.deepest = max(self.deepest, depth)
        if self.size > MOST_VALUES:
            found, allowed = f"more than {MOST_VALUES} values", "must be a smaller file"
        elif depth > DEEPEST:
            found = f"more than {DEEPEST} levels within each other"
            allowed = "must be written flatter"
        else:
            return
        self.document.refuse((), found, allowed, _line(event))
        raise _Hopeless


def _line(event: yaml.Event) -> int:
    return event.start_mark.line + 1
