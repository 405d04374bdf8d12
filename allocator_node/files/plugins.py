"""Tables of classes that other installed packages can add to through entry points."""

from __future__ import annotations

import dataclasses
import typing
from collections.abc import Mapping
from functools import cache
from importlib.metadata import EntryPoint, entry_points
from typing import TypeVar

T = TypeVar("T")


class PluginError(Exception):
    """A class of another package cannot be used; says which package and why."""


def extended(table: Mapping[str, type[T]], group: str, base: type[T]) -> Mapping[str, type[T]]:
    """Give a table together with the classes of an entry point group.

    Args:
        table: Name in a team file to class.
        group: Name of the entry point group; an entry's name is the name in a file.
        base: What each class must derive from.

    Raises:
        PluginError: If an entry cannot be imported, is not a dataclass derived
            from ``base``, or takes a name that is taken.
    """
    added: dict[str, type[T]] = {}
    for entry in _entries(group):
        if entry.name in table or entry.name in added:
            raise PluginError(f"{_origin(entry)} takes a name that is taken")
        added[entry.name] = _loaded(entry, base)
    return {**table, **added}


@cache
def _entries(group: str) -> tuple[EntryPoint, ...]:
    return tuple(entry_points(group=group))


def _loaded(entry: EntryPoint, base: type[T]) -> type[T]:
    try:
        loaded = entry.load()
    except Exception as error:  # whatever another package raises while it is imported
        raise PluginError(
            f"{_origin(entry)} cannot be imported: {type(error).__name__}: {error}"
        ) from error
    if not (isinstance(loaded, type) and issubclass(loaded, base)):
        raise PluginError(f"{_origin(entry)} is not derived from {base.__module__}.{base.__name__}")
    if not dataclasses.is_dataclass(loaded) or loaded.__abstractmethods__:
        raise PluginError(f"{_origin(entry)} is not a dataclass with all methods of its base")
    try:
        typing.get_type_hints(loaded)
    except NameError as error:
        raise PluginError(f"{_origin(entry)} has annotations without meaning: {error}") from None
    return loaded


def _origin(entry: EntryPoint) -> str:
    package = f" of package {entry.dist.name}" if entry.dist else ""
    return f"the entry point {entry.group}: {entry.name} = {entry.value}{package}"
