"""The first pass: is every key known and its value possible; what is wrong in plain words, and what can still be used.

A record with a fault is read again without the keys at fault, so that the second pass can look at the rest of it; the
topics of those keys are remembered as damage, so that nothing is reported twice.
"""

from __future__ import annotations

import gc
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from typing import Any, TypeVar

from pydantic import TypeAdapter, ValidationError

from allocator.scenario.faults import Damage, Finding, Owner, did_you_mean, hint, listed, shown, topic_of
from allocator.scenario.misplaced import instead
from allocator.scenario.model import MOST_COUNTED, NUMBER_TAG, TABLE_TAG, Head, Step, Table
from allocator.scenario.schema import Spec, known_keys, spec

Record = TypeVar("Record", bound=Table)
Path = tuple[str | int, ...]
ROUNDS = 8
"""How often a record is read again with fewer keys before only its name is kept."""
REQUIRED = {
    "name": "give it a name, a text in quotes",
    "capability": "state it, as capability = { cp = 1.33 } or { dpmo = 500 }",
    "demand": "state it, as [demand] with shipped_per_year = 100_000",
    "shipped_per_year": "state how many good units are shipped per year",
    "law": "give one of 'power', 'exponential', 'decade', 'quotes'",
}
NOT_WRITTEN = ("losses",)
"""Worked out from what is written."""
NAMELESS = "?"
STAND_IN_VALUES: dict[str, Any] = {
    "name": NAMELESS,
    "capability": {"sigma_level": 3.0},
    "demand": {"shipped_per_year": 1.0},
    "shipped_per_year": 1.0,
    "law": "decade",
}
STAND_INS: dict[type[Table], dict[str, Any]] = {
    Step: {"name": NAMELESS, "capability": STAND_IN_VALUES["capability"]},
    Head: {"demand": STAND_IN_VALUES["demand"]},
}
"""What stands for a record too broken to keep anything of."""


@contextmanager
def bulk() -> Iterator[None]:
    """Pause the cyclic garbage collector while many records are made: it would search them all, again and again.

    Afterwards they count as old objects (freeze and thaw moves them there unsearched); without cycles, they go as soon
    as nobody holds them.
    """
    was_on = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if gc.get_freeze_count() == 0:
            gc.freeze()
            gc.unfreeze()
        if was_on:
            gc.enable()


def read_steps(raw: Sequence[Any], findings: list[Finding], damage: Damage) -> list[Step]:
    """Return a record for every step, in the order given; what is wrong is added to the findings and the damage."""
    try:
        return TypeAdapter(list[Step]).validate_python(raw)
    except ValidationError as error:
        faulty = {int(e["loc"][0]) for e in error.errors(include_url=False, include_context=False, include_input=False)}
    sound = iter(TypeAdapter(list[Step]).validate_python([raw[i] for i in range(len(raw)) if i not in faulty]))
    return [
        read_record(Step, record, ("step", i), findings, damage) if i in faulty else next(sound)
        for i, record in enumerate(raw)
    ]


def read_record(record: type[Record], raw: Any, owner: Owner, findings: list[Finding], damage: Damage) -> Record:
    """Return the record without its faulty keys; the faults are added to the findings, their topics to the damage."""
    rest = raw
    for number in range(ROUNDS):
        try:
            return record.model_validate(rest)
        except ValidationError as error:
            entries = error.errors(include_url=False)
            meant = {(*e["loc"][:-1], _meant(record, e["loc"])) for e in entries if e["type"] == "extra_forbidden"}
            for entry in entries:
                path = tuple(p for p in entry["loc"] if p not in (NUMBER_TAG, TABLE_TAG))
                # Later rounds only meet stand-ins that do not fit; a misspelled key is not missing as well.
                if number == 0 and not (entry["type"] == "missing" and entry["loc"] in meant):
                    _report(record, entry["type"], path, entry["input"], owner, findings, damage)
                rest = _without(rest, path) if entry["type"] != "missing" else _with_stand_in(rest, path)
    damage.update((owner, topic_of(key)) for key in known_keys(record))
    return record.model_validate(STAND_INS.get(record, {}))


def _meant(record: type[Table], location: Path) -> str | None:
    """Return the key nearest to an unknown one."""
    path = tuple(part for part in location if part not in (NUMBER_TAG, TABLE_TAG))
    return hint(str(path[-1]), known_keys(record, path[:-1]))


def _report(
    record: type[Table], kind: str, path: Path, found: object, owner: Owner, findings: list[Finding], damage: Damage
) -> None:
    whose, inner = _owner_of(owner, path)
    key = ".".join(str(part + 1) if isinstance(part, int) else part for part in inner)
    finding = Finding(whose, key, *_texts(record, kind, path, found))
    if finding not in findings:
        findings.append(finding)
    damage.add(finding.topic)
    if kind == "extra_forbidden":
        # A misspelled name of a list entry or of a key deeper down has that key's topic already.
        damage.add((whose, topic_of(_meant(record, path) or key if len(inner) == 1 else key)))
    if not inner:
        below = ("alternative", 0) if whose != owner and whose[0] == "alternative" else ()
        damage.update((whose, topic_of(known)) for known in known_keys(record, below))


def _owner_of(owner: Owner, path: Path) -> tuple[Owner, Path]:
    """Return whose key a path leads to: an alternative of the step, a purchase or a table of the head, or itself."""
    if owner and owner[0] == "step" and path[:1] == ("alternative",) and len(path) > 1:
        return ("alternative", owner[1], path[1]), path[2:]
    if owner == () and path[:1] == ("purchase",) and len(path) > 1:
        return ("purchase", path[1]), path[2:]
    if owner == () and len(path) > 1:
        return (path[0],), path[1:]
    return owner, path


def _texts(record: type[Table], kind: str, path: Path, found: object) -> tuple[str, str]:
    """Return what was found and what is allowed."""
    if kind == "missing":
        return "nothing", REQUIRED.get(str(path[-1]), f"state it: {spec(record, path).words}")
    if kind == "extra_forbidden":
        misplaced = instead(record, path)
        if misplaced is not None:
            return "a key that does not belong here", misplaced
        known = [key for key in known_keys(record, path[:-1]) if key not in NOT_WRITTEN]
        return "an unknown key", did_you_mean(str(path[-1]), known, f"the keys known here are {listed(known)}")
    if kind == "string_too_short":
        return "an empty text", "give it a name"
    if not path:
        return shown(found), "give a table of keys"
    return shown(found), _allowed(spec(record, path), found)


def _allowed(here: Spec, found: object) -> str:
    if here.choices and isinstance(found, str):
        near = hint(found, here.choices)
        return f"did you mean '{near}'?" if near else f"give {here.words}"
    if isinstance(found, (int, float)) and MOST_COUNTED < abs(found) < float("inf"):
        return f"give {here.words}, of a size that a line can have"
    if isinstance(found, (int, float)) and here.upper == 1.0 and 1.0 < found <= 100.0:
        return f"give {here.words}; a percentage is divided by 100, as 99.5 % is 0.995"
    if isinstance(found, str) and "number" in here.kinds + ("number",) * ("integer" in here.kinds):
        return f"give {here.words}, {_number_help(found)}"
    return f"give {here.words}"


def _number_help(found: str) -> str:
    if "," in found:
        return "with a decimal point and no thousands separator, as 1.5"
    return "without quotes, unit or percent sign"


def _without(raw: Any, path: Path) -> Any:
    """Return a copy of nested dicts and lists without the entry at the path (a list entry becomes empty)."""
    if not path or not isinstance(raw, (dict, list, tuple)):
        return {}
    first, rest = path[0], path[1:]
    if isinstance(raw, dict):
        if first not in raw:
            return raw
        if not rest:
            return {key: value for key, value in raw.items() if key != first}
        return {**raw, first: _without(raw[first], rest)}
    return [_without(value, rest) if i == first else value for i, value in enumerate(raw)]


def _with_stand_in(raw: Any, path: Path) -> Any:
    """Return a copy with a stand-in for a missing key: harmless, and hidden from the second pass by the damage."""
    *parents, last = path
    return _with(raw, tuple(parents), str(last), STAND_IN_VALUES.get(str(last), 1))


def _with(raw: Any, parents: Path, key: str, value: object) -> Any:
    if not parents:
        return {**raw, key: value} if isinstance(raw, dict) else raw
    first, rest = parents[0], parents[1:]
    if isinstance(raw, dict):
        return {**raw, first: _with(raw[first], rest, key, value)} if first in raw else raw
    return [_with(entry, rest, key, value) if i == first else entry for i, entry in enumerate(raw)]
