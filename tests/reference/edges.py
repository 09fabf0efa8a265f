"""Optima at targets just inside the best reachable, where little room is left and steps differ by many orders.

`python -m tests.reference.edges --write` computes them again and writes edges.csv.
"""

from __future__ import annotations

import csv
import math
import sys
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

from tests.reference.generate import random_scenario
from tests.reference.line import split_target
from tests.reference.optimum import best_reachable, optimum

TABLE = Path(__file__).with_name("edges.csv")
# each of these once stopped a solver far from the optimum, or was given a bound that did not hold
KNOWN = (
    (11, 1e-5), (25, 1e-5), (25, 1e-3), (33, 1e-7), (36, 1e-4), (36, 1e-6), (42, 1e-2), (59, 1e-3), (81, 1e-6),
    (81, 1e-4), (92, 1e-5), (99, 1e-8), (99, 1e-7), (99, 1e-3), (116, 1e-7), (116, 1e-6), (142, 1e-6), (142, 1e-5),
    (144, 1e-7), (182, 1e-5), (182, 1e-4), (188, 1e-4), (222, 1e-2), (225, 1e-6),
)  # fmt: skip
CASES = (*KNOWN, *((seed, (1e-2, 1e-3, 1e-4, 1e-5, 1e-6)[seed % 5]) for seed in range(3, 240, 8)))


def edge_scenario(seed: int, nines: float) -> dict:
    """The random scenario with its split target at so many nines."""
    scenario = random_scenario(seed)
    scenario.setdefault("target", {})[split_target(scenario)] = {"nines": nines}
    return scenario


def row_of(case: tuple[int, float]) -> dict | None:
    """One line of the table; None where no yield can be promised."""
    seed, room = case
    exponent = best_reachable(random_scenario(seed))["exponent"]
    if not exponent:
        return None
    nines = -math.log10(-math.expm1(-exponent * (1 + room)))
    best = optimum(edge_scenario(seed, nines))
    told = {"nines": nines, "total": best["total"], "lower": best["lower"]}
    return {"seed": seed, "room": room} | {key: repr(float(value)) for key, value in told.items()}


def write_table() -> None:
    """Compute every case on both cores and write the table."""
    with ProcessPoolExecutor(max_workers=2) as pool:
        rows = [row for row in pool.map(row_of, CASES) if row is not None]
    with TABLE.open("w", newline="", encoding="utf-8") as file:
        table = csv.DictWriter(file, fieldnames=list(rows[0]), lineterminator="\n")
        table.writeheader()
        table.writerows(rows)
    print(f"{len(rows)} cases")


if __name__ == "__main__":
    if "--write" not in sys.argv:
        sys.exit("usage: python -m tests.reference.edges --write")
    write_table()
