"""What is meant by a key that is known, but not where it stands, and what to write instead."""

from __future__ import annotations

from collections.abc import Sequence

from allocator.scenario.model import Alternative, Capability, Step, Table, Target

OF_A_YIELD = "say of which yield, as final_yield = "
IN_TARGET = {
    "nines": f"{OF_A_YIELD}{{ nines = 2 }} (rolled_yield and shipped_yield take it too)",
    "ppm": f"{OF_A_YIELD}{{ ppm = 500 }} (rolled_yield and shipped_yield take it too)",
    "bad": f"{OF_A_YIELD}{{ bad = 1, per = 2_000 }}",
    "per": f"{OF_A_YIELD}{{ bad = 1, per = 2_000 }}",
    "yield": "say which yield: final_yield, rolled_yield or shipped_yield",
}
IN_ALTERNATIVE = {
    "supplier": "it belongs to the step: name the alternative after the other supplier and give its per_item and "
    "capability here, or write the line with that supplier as a file of its own and set both side by side with "
    "allocator compare",
    "cost_added": "what the item is worth belongs to the step: give what it costs more or less here as per_item",
    "scrap_cost": "what the item is worth belongs to the step: give what it costs more or less here as per_item",
    "improve": "a law belongs to the step: it goes on from the level of the alternative that is chosen",
    "at_least": "a floor belongs to the step: it binds whatever is chosen",
    "safety": "it belongs to the step: it holds whatever is chosen",
}
IN_STEP = {
    "price": "a price belongs to what is bought: write it in a [[step.alternative]], or in improve",
    "final_yield": "a promise is made for the whole line: write it under [target]",
}
FLAT_CAPABILITY = "it belongs into the capability, as capability = {{ {key} = … }}"


def instead(record: type[Table], path: Sequence[str | int]) -> str | None:
    """Return what to write instead of a key that cannot stand at a path within a record, None where nothing is known.

    >>> instead(Target, ("yield",))
    'say which yield: final_yield, rolled_yield or shipped_yield'
    """
    *table, key = path
    key = str(key)
    if record is Target and not table:
        return IN_TARGET.get(key)
    if record is Alternative or (record is Step and table[:1] == ["alternative"] and len(table) == 2):
        return IN_ALTERNATIVE.get(key) or _in_the_capability(key)
    return IN_STEP.get(key) or _in_the_capability(key) if record is Step and not table else None


def _in_the_capability(key: str) -> str | None:
    known = {field.alias or name for name, field in Capability.model_fields.items()} - set(Table.model_fields)
    return FLAT_CAPABILITY.format(key=key) if key in known else None
