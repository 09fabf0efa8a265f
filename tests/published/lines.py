"""Scenarios as dicts in few words, the published tables, and the commands' JSON for a scenario."""

from __future__ import annotations

import csv
import json
import math
from pathlib import Path
from typing import Any

from typer.testing import CliRunner

from allocator.cli import app
from allocator.plan import make_plan
from allocator.results import Plan, Today
from allocator.scenario.read import scenario_from_dict
from allocator.today import see_today

FOLDER = Path(__file__).parent
NO_INTEREST = {"shipped_per_year": 1, "years": 1, "discount_rate": 0}
"""One unit a year for one year without interest: a price of 1 then costs 1 per year."""


def rows(name: str) -> list[dict[str, Any]]:
    """The rows of a published table; cells that read as numbers are numbers, empty ones None."""
    with (FOLDER / name).open(encoding="utf-8", newline="") as file:
        return [{key: _cell(text) for key, text in row.items()} for row in csv.DictReader(file)]


def _cell(text: str) -> Any:
    try:
        return float(text)
    except ValueError:
        return text or None


def step(name: str, capability: dict[str, Any], **keys: Any) -> dict[str, Any]:
    """A step at which nothing of value is lost, unless `keys` say so."""
    return {"name": name, "scrap_cost": 0, "capability": capability, **keys}


def line(*steps: dict[str, Any], **tables: Any) -> dict[str, Any]:
    """A scenario of these steps; prices cost themselves per year unless `demand` says otherwise."""
    return {"demand": NO_INTEREST, **tables, "step": list(steps)}


def today(scenario: dict[str, Any]) -> Today:
    return see_today(scenario_from_dict(scenario))


def plan(scenario: dict[str, Any], **asked: Any) -> Plan:
    return make_plan(scenario_from_dict(scenario), **asked)


def with_defects(dpu: float) -> dict[str, Any]:
    """A capability whose defect intensity is `dpu` per opportunity: p = 1 − exp(−dpu)."""
    return {"defect_rate": -math.expm1(-dpu)}


def command(folder: Path, name: str, scenario: dict[str, Any], *options: str) -> dict[str, Any]:
    """What `allocator NAME FILE --json` prints for this scenario, written to a TOML file in `folder`."""
    file = folder / "line.toml"
    file.write_text("".join(f"{key} = {_toml(value)}\n" for key, value in scenario.items()), encoding="utf-8")
    result = CliRunner().invoke(app, [name, str(file), "--json", *options])
    assert result.exit_code == 0, result.output
    return json.loads(result.stdout)


def _toml(value: Any) -> str:
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{key} = {_toml(inner)}" for key, inner in value.items()) + " }"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_toml(inner) for inner in value) + "]"
    return json.dumps(value)
