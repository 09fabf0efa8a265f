"""The capability study for programs: JSON at full precision, and its indices as CSV."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

from allocator.report.plain import pick, sheet
from allocator.results import Indices, Study

NAMES = ("cp", "cpk", "pp", "ppk")
AFTER = (
    "file", "column", "subgroup", "n_subgroups", "lsl", "usl", "within_method", "confidence", "cpk_method",
    "cpk_at_least", "ppk_at_least", "counted", "modelled_is_beyond_data", "gauge_share",
)  # fmt: skip


def measure_json(study: Study) -> dict[str, Any]:
    return {
        **pick(study, ("n", "mean", "std_within", "std_total")),
        **{name: asdict(getattr(study.indices, name)) for name in NAMES},
        **pick(study, ("counted_ppm", "modelled_ppm", *AFTER)),
        "without_gauge": None if study.without_gauge is None else asdict(study.without_gauge),
        "fit": None if study.fit is None else asdict(study.fit),
        "signals": [asdict(signal) for signal in study.signals],
        "outliers": None if study.outliers is None else [asdict(out) for out in study.outliers],
        "capability_line": study.capability_line,
        "notes": study.notes,
    }


def measure_csv(study: Study) -> str:
    rows: list[list[object]] = [["figures", "index", "value", "lower", "upper"]]
    rows += _rows("raw", study.indices)
    if study.without_gauge is not None:
        rows += _rows("without gauge", study.without_gauge)
    return sheet(rows)


def _rows(figures: str, indices: Indices) -> list[list[object]]:
    return [[figures, name, *asdict(getattr(indices, name)).values()] for name in NAMES]
