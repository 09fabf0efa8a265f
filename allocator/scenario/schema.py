"""What may stand at a key: its kind, range, choices and neighbours, read off the records themselves."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache
from typing import Any

from pydantic import TypeAdapter

from allocator.scenario.model import LARGEST, MOST_COUNTED, Table

REMARKS = ("source", "evidence", "note")
PLAIN_WORDS = {
    "string": "a text in quotes",
    "boolean": "true or false",
    "object": "a table { … }",
    "array": "a list of tables, [[…]] in double brackets or [{ … }]",
}


@dataclass(frozen=True)
class Spec:
    """What may stand at one key.

    Parameters
    ----------
    kinds : tuple of str
        Of "number", "integer", "string", "boolean", "object", "array".
    words : str
        The same for the user, as ``a number from 0 to 1``.
    choices : tuple of str
        The only texts allowed, if any.
    keys : tuple of str
        The keys of a table.
    upper, lower : float or None
        The bounds, closed or open.
    """

    kinds: tuple[str, ...]
    words: str
    choices: tuple[str, ...] = ()
    keys: tuple[str, ...] = ()
    upper: float | None = None
    lower: float | None = None


@cache
def _schema(record: type[Table]) -> dict[str, Any]:
    return TypeAdapter(record).json_schema(by_alias=True)


def known_keys(record: type[Table], path: Sequence[str | int] = ()) -> tuple[str, ...]:
    """Return the keys of a record, or of the table at a path within it."""
    return spec(record, path).keys


def spec(record: type[Table], path: Sequence[str | int]) -> Spec:
    """Return what may stand at a path of keys (and list positions) within a record."""
    schema = _schema(record)
    options = [schema]
    for part in path:
        options = [below for option in options for below in _below(option, part, schema)]
    return _spec_of(options)


def _below(option: dict[str, Any], part: str | int, schema: dict[str, Any]) -> list[dict[str, Any]]:
    inner = option.get("items") if isinstance(part, int) else option.get("properties", {}).get(part)
    return _options(inner, schema) if inner is not None else []


def _options(node: dict[str, Any], schema: dict[str, Any]) -> list[dict[str, Any]]:
    """Return the alternatives that a node stands for, references followed, null left out."""
    if "$ref" in node:
        return [schema["$defs"][node["$ref"].rsplit("/", 1)[1]]]
    inner = node.get("anyOf") or node.get("oneOf")
    if inner is None:
        return [] if node.get("type") == "null" else [node]
    return [option for part in inner for option in _options(part, schema)]


def _spec_of(options: list[dict[str, Any]]) -> Spec:
    kinds = tuple(option.get("type", "string") for option in options)
    choices = tuple(str(choice) for option in options for choice in option.get("enum", ()))
    keys = tuple(key for option in options for key in option.get("properties", {}))
    tops = [option.get("exclusiveMaximum", option.get("maximum")) for option in options]
    ordered = tuple(k for k in keys if k not in REMARKS) + tuple(k for k in keys if k in REMARKS)
    bottoms = [option.get("exclusiveMinimum", option.get("minimum")) for option in options]
    upper = next((top for top in tops if top is not None), None)
    lower = next((bottom for bottom in bottoms if bottom is not None), None)
    return Spec(kinds, " or ".join(map(_words, options)), choices, ordered, upper, lower)


def _words(option: dict[str, Any]) -> str:
    kind = option.get("type")
    if "enum" in option:
        return "one of " + ", ".join(map(repr, option["enum"]))
    if kind in ("number", "integer"):
        return ("a number" if kind == "number" else "a whole number") + _range(option)
    return PLAIN_WORDS.get(str(kind), "another kind of value")


def _range(option: dict[str, Any]) -> str:
    low, above = option.get("minimum"), option.get("exclusiveMinimum")
    high, below = option.get("maximum"), option.get("exclusiveMaximum")
    # The widest bounds of all only keep arithmetic from overflowing; they explain nothing.
    low = None if low is None or low <= -LARGEST or above is not None else low
    high = None if high is None or high >= MOST_COUNTED or below is not None else high
    if low is not None and high is not None:
        return f" from {low:,.9g} to {high:,.9g}"
    ends = [f"above {above:,.9g}"] if above is not None else []
    ends += [f"below {below:,.9g}"] if below is not None else []
    ends += [f"up to {high:,.9g}"] if high is not None else []
    start = f", {low:g} or more" if low is not None else ""
    return start + (" " if ends and not start else " and " if ends else "") + " and ".join(ends)


def columns(record: type[Table]) -> dict[str, tuple[str, ...]]:
    """Return the columns that a table of such records may have, each with its path of keys.

    The figures of the capability need no prefix, unless the record has a key of that name itself.
    """
    found: dict[str, tuple[str, ...]] = {}
    _add_columns(record, (), found)
    for key in known_keys(record, ("capability",)):
        found.setdefault(key, ("capability", key))
    return found


def _add_columns(record: type[Table], path: tuple[str, ...], found: dict[str, tuple[str, ...]]) -> None:
    for key in known_keys(record, path):
        here = (*path, key)
        kinds = spec(record, here).kinds
        if "array" in kinds:
            continue
        if "object" in kinds:
            _add_columns(record, here, found)
        if kinds != ("object",):
            found[".".join(here)] = here
