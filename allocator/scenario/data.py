"""What do measurements in a file say: mean, standard deviation and sample size, filled in beside the limits."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from allocator.scenario.faults import Damage, Finding, Owner, shown
from allocator.scenario.measurements import Measurements, UnusableError, read_measurements
from allocator.spread import pooled_within

COUNTED = ("mean", "std", "sample")
"""What the measurements themselves say; stating it as well could only contradict them."""


def fill_from_data(table: Any, owner: Owner, folder: Path | None, findings: list[Finding], damage: Damage) -> Any:
    """Return a step's or alternative's table with mean, std and sample of the file that its capability names.

    Anything else comes back as it is; what is wrong is added to the findings, and the capability to the damage.
    """
    capability = table.get("capability") if isinstance(table, dict) else None
    if not isinstance(capability, dict) or not isinstance(capability.get("data"), str):
        return table
    before = len(findings)
    stated = [key for key in COUNTED if key in capability]
    if stated:
        found = f"{' and '.join(stated)} beside data"
        findings.append(Finding(owner, "capability", found, "leave them out: they are counted from the file"))
    try:
        measured = _measured(capability, folder)
    except UnusableError as wrong:
        findings.append(Finding(owner, f"capability.{wrong.key}", wrong.found, wrong.allowed))
    if len(findings) > before:
        damage.add((owner, "capability"))
        return table
    return {**table, "capability": {**capability, **statistics(measured)}}


def statistics(measured: Measurements) -> dict[str, Any]:
    """Return the figures that a capability takes from measurements: the mean, the spread and the sample.

    The spread is that within subgroups where they are named, else the total one, whatever the order of the parts.
    """
    values, subgroups = np.array(measured.values), measured.subgroups
    std = float(np.std(values, ddof=1)) if subgroups is None else pooled_within(values, subgroups)[0]
    return {"mean": float(np.mean(values)), "std": std, "sample": len(values)}


def _measured(capability: dict[str, Any], folder: Path | None) -> Measurements:
    name, names = capability["data"], {key: capability.get(key) for key in ("column", "subgroup")}
    if folder is None:
        allowed = "no folder is known to look in: give lsl, usl, mean, std and sample instead"
        raise UnusableError("data", shown(name), allowed)
    for key, value in names.items():
        if value is not None and not isinstance(value, str):
            raise UnusableError(key, shown(value), "give the name of a column, a text in quotes")
    measured = read_measurements(folder / name, name, names["column"], names["subgroup"])
    if measured.subgroups is not None and pooled_within(np.array(measured.values), measured.subgroups)[0] == 0.0:
        found = f"'{name}': all parts of each subgroup are equal"
        raise UnusableError("subgroup", found, "measure with a finer gauge, or leave subgroup out")
    return measured
