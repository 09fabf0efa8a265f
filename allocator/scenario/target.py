"""What does the promise mean: each yield target as a loss, exact for many nines."""

from __future__ import annotations

import sys
from collections.abc import Callable
from decimal import Decimal
from typing import Any

from allocator.scenario.faults import Damage, Finding, did_you_mean, shown
from allocator.scenario.keys import read_record
from allocator.scenario.model import YIELD_NAMES, Target, YieldName

OWNER = ("target",)
MOST_NINES = 300.0
"""10^-300 is still a number; a promise beyond it could not be written down."""
FORMS = "a number below 1, or one of { nines = 4 }, { ppm = 500 } (defective units), { bad = 1, per = 2_000 }"
CERTAINTY = "no finite spend buys certainty; give e.g. { nines = 6 }"


def read_target(raw: Any, findings: list[Finding], damage: Damage) -> Target:
    """Return the target; what is wrong is added to the findings, a yield at fault is left out."""
    if not isinstance(raw, dict):
        findings.append(Finding((), "target", shown(raw), "give a table: [target] with final_yield = …"))
        return Target()
    if "losses" in raw:
        known = (*YIELD_NAMES, "escape_cost")
        unknown = did_you_mean("losses", known, f"the keys known here are {', '.join(known)}")
        findings.append(Finding(OWNER, "losses", "an unknown key", unknown))
    rest = {key: value for key, value in raw.items() if key not in (*YIELD_NAMES, "losses")}
    read = {name: _loss(raw[name], name, findings) for name in YIELD_NAMES if name in raw}
    losses = {name: loss for name, loss in read.items() if loss is not None}
    target = read_record(Target, rest, OWNER, findings, damage)
    return target.model_copy(update={"losses": losses, **{name: 1.0 - loss for name, loss in losses.items()}})


def _loss(raw: Any, name: YieldName, findings: list[Finding]) -> float | None:
    """Return 1 − yield, or None after reporting what is wrong."""
    if isinstance(raw, dict):
        return _loss_of_table(raw, name, findings)
    if not _is_number(raw):
        findings.append(Finding(OWNER, name, shown(raw), f"give {FORMS}"))
        return None
    # From the shortest decimal that means this float: 1 − 0.9999 is then 1e-4, not 9.9999999999989e-05.
    if 0.0 < raw < 1.0:
        return float(1 - Decimal(repr(float(raw))))
    findings.append(Finding(OWNER, name, shown(raw), _remedy(float(raw))))
    return None


def _remedy(value: float) -> str:
    if value == 1.0 or value == 100.0 or value == float("inf"):
        return CERTAINTY
    if 1.0 < value < 100.0:
        return f"a yield lies between 0 and 1; if this is a percentage write {value / 100.0:.15g}"
    return f"give {FORMS}"


def _loss_of_table(raw: dict[str, Any], name: YieldName, findings: list[Finding]) -> float | None:
    reported = len(findings)
    forms: dict[frozenset[str], Callable[[], float]] = {
        frozenset({"nines"}): lambda: 10.0 ** -float(raw["nines"]),
        frozenset({"ppm"}): lambda: float(raw["ppm"]) * 1e-6,
        frozenset({"bad", "per"}): lambda: float(raw["bad"]) / float(raw["per"]),
    }
    loss_of = forms.get(frozenset(raw))
    if loss_of is None:
        found = "{ " + ", ".join(raw) + " }" if raw else "an empty table"
        findings.append(Finding(OWNER, name, found, f"give {FORMS}"))
        return None
    for key, value in raw.items():
        if not _is_number(value) or value != value or value < 0.0:
            findings.append(Finding(OWNER, f"{name}.{key}", shown(value), "give a number above 0"))
    if len(findings) > reported:
        return None
    return _checked_loss(raw, name, loss_of, findings)


def _checked_loss(
    raw: dict[str, Any], name: YieldName, loss_of: Callable[[], float], findings: list[Finding]
) -> float | None:
    zero_loss = raw.get("ppm") == 0 or raw.get("bad") == 0 or raw.get("nines", 0) > MOST_NINES
    if not zero_loss and raw.get("per") != 0:
        loss = loss_of()
        if 0.0 < loss < 1.0:
            return loss
    found = "{ " + ", ".join(f"{key} = {value}" for key, value in raw.items()) + " }"
    nothing_left = "this leaves no good unit; the loss must lie between 0 and 1"
    findings.append(Finding(OWNER, name, found, CERTAINTY if zero_loss else nothing_left))
    return None


def _is_number(value: object) -> bool:
    """Booleans are none, and neither are whole numbers too long for arithmetic."""
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        return False
    return isinstance(value, float) or value.bit_length() < sys.float_info.max_exp
