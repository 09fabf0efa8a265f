"""What is measured, each part in a process of its own, so that its peak memory is its own."""

from __future__ import annotations

import csv
import json
import os
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

from tests.benchmarks.lines import Shape, draw, scenario_of

ROOT = Path(__file__).parent.parent.parent
SIZES = {
    "continuous": (20, 200, 2_000, 20_000, 100_000, 1_000_000),
    "mixed": (20, 200, 1_000, 20_000, 100_000, 1_000_000),
}
LINES = (("high", False), ("high", True), ("low", False), ("low", True))
PEERS = {"continuous": ("CLARABEL", "HIGHS", "slsqp"), "mixed": ("whole",)}
LINES_OF_PEERS = (("high", False), ("low", False), ("low", True))
MOST = {"CLARABEL": 20_000, "HIGHS": 2_000, "slsqp": 200, "whole": 1_000}
"""Steps up to which a peer is asked; beyond, it takes minutes or gives up."""
OUR_LIMIT = 600.0
"""Seconds after which our own run is given up."""
ENVIRONMENT = {"OPENBLAS_NUM_THREADS": "1", "PYTHONWARNINGS": "ignore", "NO_COLOR": "1"}
Record = dict[str, Any]


@dataclass
class Case:
    """One line measured: our record, and what every peer that was asked said last."""

    shape: Shape
    ours: Record
    peers: dict[str, Record] = field(default_factory=dict)


def cases(most: int, seconds: float) -> Iterator[Case]:
    """Yield every case up to so many steps; a peer that runs longer than `seconds` is stopped."""
    for kind, sizes in SIZES.items():
        for steps in sizes:
            for yields, tree in LINES:
                if steps <= most:
                    yield measure(Shape(steps, kind, yields, tree), seconds)


def measure(shape: Shape, seconds: float) -> Case:
    """Return one case; peers are asked on some of the lines, up to the size that suits them."""
    case = Case(shape, last_record(shape, None, OUR_LIMIT))
    if (shape.yields, shape.tree) in LINES_OF_PEERS:
        for peer in PEERS[shape.kind]:
            if shape.steps <= MOST[peer]:
                case.peers[peer] = last_record(shape, peer, seconds)
    return case


def last_record(shape: Shape, peer: str | None, seconds: float) -> Record:
    """Return all that a process said, later records over earlier ones; "stopped" where its processor time ran out."""
    asked = json.dumps({"shape": asdict(shape), "peer": peer, "seconds": seconds})
    command = [sys.executable, "-m", "tests.benchmarks.run", asked]
    process = subprocess.Popen(command, cwd=ROOT, env=os.environ | ENVIRONMENT, stdout=subprocess.PIPE, text=True)
    said, _ = process.communicate()
    record: Record = {}
    for line in said.splitlines():
        record |= json.loads(line)
    if process.returncode == -signal.SIGXCPU:
        record["stopped"] = f"stopped after {seconds:g} s"
    elif process.returncode:
        record["stopped"] = f"ended with code {process.returncode}"
    return record


def end_to_end(steps: int) -> Record:
    """Return what `plan --json` takes for a table of so many steps, in a process of its own, reading included."""
    drawn = draw(Shape(steps))
    with tempfile.TemporaryDirectory() as folder:
        scenario = _written(scenario_of(drawn), Path(folder))
        with (Path(folder) / "plan.json").open("w") as answer:
            began = time.perf_counter()
            command = [sys.executable, "-m", "allocator", "plan", str(scenario), "--json"]
            process = subprocess.Popen(command, cwd=ROOT, env=os.environ | ENVIRONMENT, stdout=answer)
            _, status, used = os.wait4(process.pid, 0)
            took = time.perf_counter() - began
        process.returncode = os.waitstatus_to_exitcode(status)
        with (Path(folder) / "plan.json").open() as answer:
            plan = json.load(answer) if process.returncode == 0 else {}
    return {
        "steps": steps,
        "seconds": used.ru_utime + used.ru_stime,
        "wall": took,
        "peak_MiB": used.ru_maxrss / 1024.0,
        "exit": process.returncode,
        "gap": plan.get("gap"),
    }


def _written(scenario: dict[str, Any], folder: Path) -> Path:
    """Write a line as a scenario file with its table of steps."""
    rows = [dict(_flat(step)) for step in scenario["step"]]
    names = list(dict.fromkeys(name for row in rows for name in row))
    with (folder / "steps.csv").open("w", newline="") as file:
        writer = csv.DictWriter(file, names)
        writer.writeheader()
        writer.writerows(rows)
    text = 'steps_from = "steps.csv"\n'
    for table in ("demand", "target"):
        text += f"[{table}]\n" + "".join(f"{key} = {value!r}\n" for key, value in scenario[table].items())
    (folder / "line.toml").write_text(text)
    return folder / "line.toml"


def _flat(step: dict[str, Any]) -> Iterator[tuple[str, Any]]:
    """Yield the columns of a step: capability's own names stand alone, as in any table of steps."""
    for key, value in step.items():
        if key == "capability":
            yield from value.items()
        elif isinstance(value, dict):
            yield from ((f"{key}.{inner}", figure) for inner, figure in value.items())
        else:
            yield key, value
