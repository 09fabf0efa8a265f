"""How does what was measured read: one text, printed and kept in the README."""

from __future__ import annotations

import math
import os
import platform
from collections.abc import Sequence
from importlib.metadata import version

import numpy as np

from tests.benchmarks.cases import LINES, MOST, PEERS, Case, Record
from tests.benchmarks.run import GAP

TITLES = {"continuous": "a law of improvement at every step", "mixed": "six ways at every step"}
NAMES = {"CLARABEL": "cvxpy, Clarabel", "HIGHS": "cvxpy, HiGHS", "slsqp": "SLSQP", "whole": "whole in HiGHS"}
GROWTH_FROM = 1_000
"""Steps from which growth is read: below, what is paid once per question covers it."""
LIBRARIES = ("numpy", "scipy", "cvxpy", "clarabel", "highspy")


def text_of(measured: Sequence[Case], whole: Record | None) -> str:
    """Return the tables, with the machine they were measured on."""
    parts = [machine()]
    for kind in PEERS:
        mine = [case for case in measured if case.shape.kind == kind]
        if mine:
            parts += [ours_table(kind, mine), peers_table(kind, mine)]
    if whole is not None:
        parts.append(_end_to_end(whole))
    return "\n\n".join(part for part in parts if part)


def machine() -> str:
    """Return the description of this machine and its libraries."""
    libraries = ", ".join(f"{name} {version(name)}" for name in LIBRARIES)
    load = os.getloadavg()[1] if hasattr(os, "getloadavg") else math.nan
    return (
        f"{os.cpu_count()} cores, {_processor()}, {platform.system()};\n"
        f"Python {platform.python_version()}, {libraries}.\n"
        f"Processor time in seconds, best of a few; load of the machine meanwhile {load:.1f}."
    )


def _processor() -> str:
    try:
        with open("/proc/cpuinfo") as file:
            named = [line.split(":", 1)[1].strip() for line in file if line.startswith("model name")]
    except OSError:
        named = []
    return named[0] if named else platform.processor() or platform.machine()


def ours_table(kind: str, measured: Sequence[Case]) -> str:
    """Return our own times by size and line, with the worst gap, memory and ratio to one pass of the tails."""
    head = ["steps", *(_line(*line) for line in LINES), "gap", "floors", "peak"]
    rows = []
    sizes = list(dict.fromkeys(case.shape.steps for case in measured))
    for steps in sizes:
        records = {(c.shape.yields, c.shape.tree): c.ours for c in measured if c.shape.steps == steps}
        done = [record for record in records.values() if "gap" in record]
        timed = [record for record in done if record["floor"] > 0.0]  # a pass can be too short for the clock
        worst = [f"{max(r['gap'] for r in done):.0e}" if done else "-"]
        worst += [f"{max(r['seconds'] / r['floor'] for r in timed):.0f}" if timed else "-"]
        worst += [f"{max(r['peak_MiB'] for r in done):,.0f} MiB" if done else "-"]
        rows.append([f"{steps:,}", *(_seconds(records.get(line, {})) for line in LINES), *worst])
    rows.append(["growth", *(_growth(measured, *line) for line in LINES), "", "", ""])
    title = f"From a posed problem to its plan, {TITLES[kind]} ({kind}), aimed at gap {GAP[kind]:.0e}"
    return title + "\n" + laid_out(head, rows)


def peers_table(kind: str, measured: Sequence[Case]) -> str:
    """Return seconds of the peers and how many times longer than ours they took in the same process."""
    names = PEERS[kind]
    head = ["steps", "line", "ours", *(NAMES[peer] for peer in names)]
    rows, notes = [], []
    for case in (case for case in measured if case.peers):
        cells = []
        for peer in names:
            cell, note = _peer_cell(case, peer)
            if note:
                notes += [note] if note not in notes else []
                cell += f" [{notes.index(note) + 1}]"
            cells.append(cell)
        ours = min((r["ours"] for r in case.peers.values() if "ours" in r), default=math.nan)
        rows.append([f"{case.shape.steps:,}", _line(case.shape.yields, case.shape.tree), f"{ours:.3g}", *cells])
    if not rows:
        return ""
    told = [f"[{number}] {note}" for number, note in enumerate(notes, start=1)]
    title = f"The same beside others ({kind}), to a verified gap of {GAP[kind]:.0e}: seconds, and times ours"
    return "\n".join([title, laid_out(head, rows), *told])


def _peer_cell(case: Case, peer: str) -> tuple[str, str]:
    """Return one peer's seconds and ratio, and what is to be said where it did not get there."""
    record = case.peers.get(peer)
    if record is None:
        return ("not run", "") if case.shape.steps > MOST[peer] else ("-", "")
    if "seconds" not in record:
        return "no plan", record.get("stopped", "no plan that keeps the budget")
    ratio = record["seconds"] / record["ours"]
    times = f"{ratio:,.0f}x" if ratio >= 10.0 else f"{ratio:.1f}x"
    if record["gap"] <= GAP[case.shape.kind]:
        return f"{record['seconds']:.3g} {times}", ""
    why = record.get("stopped", "nothing gained any more")
    return f"{record['seconds']:.3g} >{times}", f"got to {record['gap']:.0e} only: {why}"


def _line(yields: str, tree: bool) -> str:
    return f"{yields} {'tree' if tree else 'serial'}"


def _seconds(record: Record) -> str:
    return f"{record['seconds']:.3g}" if "seconds" in record else record.get("stopped", "-")


def _growth(measured: Sequence[Case], yields: str, tree: bool) -> str:
    """Return the slope of ln(seconds) against ln(steps): 1 is time in proportion to size."""
    points = [
        (math.log(c.shape.steps), math.log(c.ours["seconds"]))
        for c in measured
        if (c.shape.yields, c.shape.tree) == (yields, tree) and c.shape.steps >= GROWTH_FROM and "seconds" in c.ours
    ]
    if len(points) < 2:
        return "-"
    return f"n^{np.polyfit(*zip(*points, strict=True), 1)[0]:.2f}"


def _end_to_end(whole: Record) -> str:
    gap = "no plan" if whole["gap"] is None else f"gap {whole['gap']:.0e}"
    return (
        f"A table of {whole['steps']:,} steps read, planned and written (`plan --json`): {whole['seconds']:.1f} s of\n"
        f"processor time ({whole['wall']:.1f} s by the clock), {whole['peak_MiB']:,.0f} MiB, {gap}, "
        f"exit code {whole['exit']}."
    )


def laid_out(head: list[str], rows: list[list[str]]) -> str:
    """Return a table in plain text, columns as wide as they need to be, all but line names to the right."""
    widths = [max(map(len, column)) for column in zip(head, *rows, strict=True)]
    lines = [head, ["-" * width for width in widths], *rows]
    return "\n".join("  ".join(map(str.rjust, line, widths)).rstrip() for line in lines)
