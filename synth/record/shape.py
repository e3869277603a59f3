"""Does a piece of JSON have the fields that format.py says? Every departure in words, with its path."""

from __future__ import annotations

import types
from functools import cache
from typing import (
    Any,
    Literal,
    NamedTuple,
    NotRequired,
    Union,
    get_args,
    get_origin,
    get_type_hints,
    is_typeddict,
)

MOST = 8  # complaints worth reading about one file
LARGEST = 1.8e308


class Departure(NamedTuple):
    """What is wrong at one place: key path ("" for the whole file), and words that go on after it."""

    path: str
    what: str

    def __str__(self) -> str:
        return f"{self.path or 'the file'} {self.what}"


def departures(value: Any, kind: Any, path: str = "") -> list[Departure]:
    """What keeps `value` from being of the type `kind`; empty when nothing does. At most MOST complaints."""
    found: list[Departure] = []
    _compare(value, kind, path, found)
    return found[:MOST]


@cache
def _fields(kind: Any) -> dict[str, tuple[Any, bool]]:
    """Field name -> (type, required)."""
    hints = get_type_hints(kind, include_extras=True)
    out = {}
    for name, hint in hints.items():
        late = get_origin(hint) is NotRequired
        out[name] = (get_args(hint)[0] if late else hint, not late and name in kind.__required_keys__)
    return out


def _compare(value: Any, kind: Any, path: str, found: list[Departure]) -> None:
    if len(found) >= MOST or kind is Any:
        return
    origin = get_origin(kind)
    if is_typeddict(kind):
        if not isinstance(value, dict):
            found.append(Departure(path, f"must be a table, is {_named(value)}"))
            return
        for name, (inner, required) in _fields(kind).items():
            here = f"{path}.{name}" if path else name
            if name in value:
                _compare(value[name], inner, here, found)
            elif required:
                found.append(Departure(here, "is missing"))
    elif origin in (Union, types.UnionType):
        _compare_union(value, kind, path, found)
    elif origin is Literal:
        if value not in get_args(kind):
            allowed = ", ".join(map(repr, get_args(kind)))
            found.append(Departure(path, f"must be one of {allowed}, is {_named(value)}"))
    elif origin is list:
        if not isinstance(value, list):
            found.append(Departure(path, f"must be a list, is {_named(value)}"))
            return
        for i, item in enumerate(value):
            _compare(item, get_args(kind)[0], f"{path}[{i}]", found)
    elif origin is dict:
        if not isinstance(value, dict):
            found.append(Departure(path, f"must be a table, is {_named(value)}"))
            return
        for name, item in value.items():
            _compare(item, get_args(kind)[1], f"{path}.{name}", found)
    elif not _plain(value, kind):
        found.append(Departure(path, f"must be {_word(kind)}, is {_named(value)}"))


def _compare_union(value: Any, kind: Any, path: str, found: list[Departure]) -> None:
    """A union holds when one of its members does; else the complaint is that of the member of the same outer
    kind."""
    best: list[Departure] | None = None
    for member in get_args(kind):
        tried: list[Departure] = []
        _compare(value, member, path, tried)
        if not tried:
            return
        inside = isinstance(value, dict) and (is_typeddict(member) or get_origin(member) is dict)
        inside |= isinstance(value, list) and get_origin(member) is list
        if inside or best is None:
            best = tried
    words = " or ".join(dict.fromkeys(_word(m) for m in get_args(kind)))
    nested = best is not None and isinstance(value, dict | list)
    plain = Departure(path, f"must be {words}, is {_named(value)}")
    found.extend(best if best is not None and nested else [plain])


def _plain(value: Any, kind: Any) -> bool:
    if kind is type(None) or kind is None:
        return value is None
    if kind is bool:
        return isinstance(value, bool)
    if kind is int:
        return isinstance(value, int) and not isinstance(value, bool)
    if kind is float:
        number = isinstance(value, int | float) and not isinstance(value, bool)
        return number and abs(value) < LARGEST  # 1e999 reads as infinite, and a huge integer is no float
    return isinstance(value, kind)


def _word(kind: Any) -> str:
    if kind is type(None) or kind is None:
        return "null"
    if get_origin(kind) is Literal:
        return " or ".join(repr(a) for a in get_args(kind))
    if is_typeddict(kind) or get_origin(kind) is dict:
        return "a table"
    if get_origin(kind) is list:
        return "a list"
    return {str: "text", int: "a whole number", float: "a number", bool: "true or false"}.get(kind, str(kind))


def _named(value: Any) -> str:
    if value is None:
        return "null"
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list):
        return "a list"
    text = repr(value)
    return text if len(text) <= 40 else text[:37] + "..."
