"""Reads mappings of a document into the dataclasses they describe.

A dataclass is the form: its fields are the keys, their annotations say what
each may hold. Every field is checked on its own, so that one wrong value does
not hide another, and what is right can already be used in further checks.
"""

from __future__ import annotations

import dataclasses
import types
import typing
from collections import defaultdict
from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any

from pydantic import ConfigDict, TypeAdapter, ValidationError

from .document import Document, Place
from .wording import counted, described, one_of

LARGEST_NUMBER = 1e9
"""Everything is in SI units, so a greater number is a slip, and squaring it loses digits."""

BROKEN: Any = object()
"""Stands for a value that was refused."""

_STRICT = ConfigDict(strict=True, allow_inf_nan=False)


@dataclass(frozen=True)
class Draft:
    """A mapping that was read, with whatever was right in it.

    Attributes:
        form: The dataclass; None where it is not known which one is meant.
        values: Field to value, for the keys that were given and right.
        broken: Fields that were refused, or missing.
    """

    form: type | None = None
    values: Mapping[str, Any] = dataclasses.field(default_factory=dict)
    broken: Collection[str] = ()

    def get(self, name: str) -> Any:
        """Give a field's value or its default; None where it is refused or unknown."""
        if name in self.values or name in self.broken or self.form is None:
            return self.values.get(name)
        field = _fields(self.form).get(name)
        if field is None or field.default is not dataclasses.MISSING:
            return field and field.default
        return field.default_factory()

    def build(self, document: Document, place: Place, **more: Any) -> Any:
        """Build the object; BROKEN where something was refused."""
        if self.form is None or self.broken:
            return BROKEN
        try:
            return self.form(**self.values, **more)
        except (TypeError, ValueError) as error:
            document.refuse(place, "values that do not fit together", f"must be changed: {error}")
            return BROKEN


def read_fields(
    document: Document,
    place: Place,
    data: Any,
    form: type,
    *,
    elsewhere: Collection[str] = (),
    keys: Mapping[str, str] | None = None,
) -> Draft:
    """Check a mapping against a dataclass.

    Args:
        document: Where problems go.
        place: Where the mapping is in it.
        data: The mapping.
        form: The dataclass.
        elsewhere: Keys that the caller reads itself. A field ``name`` is never
            a key: the name is the key of the mapping.
        keys: Field to key, where they differ.
    """
    named = bool(place) and not isinstance(place[-1], int)
    fields = {
        (keys or {}).get(name, name): name
        for name in _fields(form)
        if name not in elsewhere and not (named and name == "name")
    }
    required = {name for name in fields.values() if _is_required(_fields(form)[name])}
    if not isinstance(data, Mapping):
        document.refuse(place, described(data), "must be a mapping (key: value)")
        return Draft(form, {}, frozenset(fields.values()))
    values, broken = {}, set()
    hints = _hints(form)
    for key, value in data.items():
        if key in fields:
            checked = read_value(document, (*place, key), value, hints[fields[key]])
            if checked is BROKEN:
                broken.add(fields[key])
            else:
                values[fields[key]] = checked
        elif key not in elsewhere:
            allowed = one_of({*fields, *elsewhere}, key)
            document.refuse((*place, key), "an unknown key", allowed)
    for key, name in fields.items():
        if name in required and key not in data:
            document.refuse((*place, key), "nothing", "must be given")
            broken.add(name)
    return Draft(form, values, frozenset(broken))


def read_value(document: Document, place: Place, data: Any, hint: Any) -> Any:
    """Check a value against an annotation; give it, or BROKEN after refusing it."""
    inner = _without_none(hint)
    if data is None and inner is not hint:
        return None
    if (form := _dataclass_choice(inner)) is not None and isinstance(data, Mapping):
        inner = form
    if dataclasses.is_dataclass(inner):
        return read_fields(document, place, data, inner).build(document, place)
    if (item := _dataclass_item(inner)) is not None:
        if not isinstance(data, tuple):
            document.refuse(place, described(data), "must be a list")
            return BROKEN
        items = [
            read_value(document, (*place, index), entry, item) for index, entry in enumerate(data)
        ]
        return BROKEN if BROKEN in items else tuple(items)
    if too_large := list(_too_large(data, ())):
        for steps, number in too_large:
            allowed = f"must be between -{LARGEST_NUMBER:g} and {LARGEST_NUMBER:g}"
            document.refuse((*place, *steps), described(number), allowed)
        return BROKEN
    try:
        return _adapter(hint).validate_python(data)
    except ValidationError as error:
        for steps, found, allowed in _explained(error, data):
            document.refuse((*place, *steps), found, allowed)
        return BROKEN


def _too_large(data: Any, place: Place) -> Iterator[tuple[Place, float]]:
    """Give the numbers in a value that are too large, and where they are."""
    if isinstance(data, int | float):
        if LARGEST_NUMBER < abs(data) < float("inf"):
            yield place, data
    elif isinstance(data, tuple | Mapping):
        for step, item in data.items() if isinstance(data, Mapping) else enumerate(data):
            yield from _too_large(item, (*place, step))


@cache
def _fields(form: type) -> dict[str, dataclasses.Field]:
    return {field.name: field for field in dataclasses.fields(form) if field.init}


def _is_required(field: dataclasses.Field) -> bool:
    return field.default is field.default_factory is dataclasses.MISSING


@cache
def _hints(form: type) -> dict[str, Any]:
    """Give the annotations; drives and tasks are read through their tables."""
    later = {"Drive": Any, "Task": Any}
    return typing.get_type_hints(form, localns=later, include_extras=True)


@cache
def _adapter(hint: Any) -> TypeAdapter:
    return TypeAdapter(hint, config=_STRICT)


def _without_none(hint: Any) -> Any:
    """Give T for ``T | None``, and any other annotation as it is."""
    if typing.get_origin(hint) in (typing.Union, types.UnionType):
        others = [part for part in typing.get_args(hint) if part is not type(None)]
        if len(others) == 1:
            return others[0]
    return hint


def _dataclass_choice(hint: Any) -> type | None:
    """Give T for a union with one dataclass T: what a mapping is read as."""
    if typing.get_origin(hint) in (typing.Union, types.UnionType):
        forms = [part for part in typing.get_args(hint) if dataclasses.is_dataclass(part)]
        return forms[0] if len(forms) == 1 else None
    return None


def _dataclass_item(hint: Any) -> type | None:
    """Give T for ``tuple[T, ...]`` of a dataclass."""
    if typing.get_origin(hint) is tuple:
        item, *rest = typing.get_args(hint) or (None,)
        if rest == [...] and dataclasses.is_dataclass(item):
            return item
    return None


def _explained(error: ValidationError, data: Any) -> Iterator[tuple[Place, str, str]]:
    """Give for each error of a validation: where, what was found, what is allowed."""
    plain: list[tuple[Place, dict]] = []
    branches: dict[str, list[tuple[Place, dict]]] = defaultdict(list)
    for one in error.errors(include_url=False, include_input=False):
        place, label = _located(one["loc"], data)
        (branches[label] if label else plain).append((place, one))
    if branches:
        fitting = [
            errors
            for errors in branches.values()
            if not any(_of_shape(located, data) for located in errors)
        ]
        if fitting:
            plain += min(fitting, key=len)
        else:
            yield (), described(data), f"must be {' or '.join(map(_shape, branches))}"
    lengths: dict[Place, int] = {}
    for place, one in plain:
        if one["type"] == "missing":
            lengths[place[:-1]] = place[-1] + 1
        else:
            yield place, *_worded(one, _at(data, place))
    for place, length in lengths.items():
        yield place, described(_at(data, place)), f"must have {counted(length, 'entry')}"


def _located(loc: Place, data: Any) -> tuple[Place, str]:
    """Split pydantic's location into the way through the data and the label of a union."""
    place: Place = ()
    label = ""
    for step in loc:
        here = _at(data, place)
        inside = isinstance(here, tuple) and isinstance(step, int)
        if inside or (isinstance(here, Mapping) and step in here):
            place = (*place, step)
        elif step != "[key]":
            label = str(step)
    return place, label


def _at(data: Any, place: Place) -> Any:
    for step in place:
        if isinstance(data, tuple) and step >= len(data):
            return None
        data = data[step]
    return data


def _shape(label: str) -> str:
    """Write the label of a union's branch as a reader would: ``[x, y]`` for two numbers."""
    if label.startswith("tuple"):
        return f"[{', '.join('xyz'[: label.count(',') + 1])}]"
    if label.startswith("literal"):
        return label.removeprefix("literal[").removesuffix("]").replace("'", "").replace(",", ", ")
    return "a mapping" if label[:1].isupper() else label


def _of_shape(located: tuple[Place, dict], data: Any) -> bool:
    """Tell whether an error of a union's branch says that the branch is not what was meant."""
    place, one = located
    if one["type"] == "literal_error":
        return not isinstance(data, str)
    wrong = ("tuple_type", "missing", "too_long", "dataclass_type")
    return one["type"] in wrong and len(place) <= 1


def _worded(one: dict, value: Any) -> tuple[str, str]:
    """Say what was found and what is allowed."""
    found, context = described(value), one.get("ctx", {})
    match one["type"]:
        case "float_type":
            numeric = isinstance(value, str) and _is_number(value)
            allowed = "must be a number" + (", without quotes" if numeric else "")
        case "int_type" | "int_from_float":
            allowed = "must be a whole number"
        case "bool_type":
            allowed = "must be true or false"
        case "string_type":
            numeric = isinstance(value, int | float)
            allowed = "must be text" + (": put it in quotes" if numeric else "")
        case "string_too_short":
            allowed = "must not be empty"
        case "finite_number":
            allowed = "must be a finite number"
        case "greater_than":
            allowed = f"must be greater than {context['gt']:g}"
        case "greater_than_equal":
            allowed = f"must be at least {context['ge']:g}"
        case "less_than":
            allowed = f"must be less than {context['lt']:g}"
        case "less_than_equal":
            allowed = f"must be at most {context['le']:g}"
        case "too_short":
            allowed = f"must have at least {counted(context['min_length'], 'entry')}"
        case "too_long":
            allowed = f"must have at most {counted(context['max_length'], 'entry')}"
        case "tuple_type":
            allowed = "must be a list"
        case "mapping_type" | "dict_type":
            allowed = "must be a mapping (key: value)"
        case "literal_error":
            choices = [part.strip("'") for part in
                       context["expected"].replace(" or ", ", ").split(", ")]
            allowed = one_of(choices, value)
        case _:
            allowed = f"must be right: {one['msg']}"
    return found, allowed


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True
