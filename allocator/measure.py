"""What do measurements say: a capability study of one column of a file, with the line to paste into a scenario."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from allocator import bounded, signals, study
from allocator.bounded import Family
from allocator.errors import Fault, InputError
from allocator.results import Fit, Indices, Outlier, Study
from allocator.scenario.data import statistics
from allocator.scenario.measurements import Measurements, UnusableError, read_measurements
from allocator.spread import Spread, total_spread, within_spread

Array = NDArray[np.float64]
CONFIDENCE = 0.95
OPTION = {"data": "", "column": "--column", "subgroup": "--subgroup"}
NORMAL_CPK = "noncentral t law, exact for one limit; Cp and Pp by the chi-square law of the variance"
PERCENTILE_PPK = f"{study.REFITS:,} samples drawn from the fitted family and fitted anew; about 92 % at 30 parts"
DRIFTS = 1.25
"""A total spread this much above the one within subgroups is more than error: the mean moves between them."""


def measure_capability(
    file: str | Path,
    *,
    column: str | None = None,
    lsl: float | None = None,
    usl: float | None = None,
    subgroup: str | None = None,
    gauge_share: float | None = None,
    bounded_at_zero: bool = False,
) -> Study:
    """Return the capability study of a column of measurements.

    Parameters
    ----------
    file : str or Path
        CSV with a header; the order of its rows is taken as the order made.
    column : str, optional
        Its column of measurements; a file of one column needs none.
    lsl, usl : float, optional
        Limits, at least one.
    subgroup : str, optional
        Column that names the subgroup of each part.
    gauge_share : float, optional
        Share of the observed total variance that comes from the gauge; shown beside the raw figures.
    bounded_at_zero : bool
        The characteristic cannot fall below zero: a skewed family is fitted and percentiles are compared.

    Raises
    ------
    InputError
        When the file, a column, a value or an option cannot be used.
    RangeError
        When the gauge would explain all of the spread.
    """
    path = Path(file)
    _refuse_unfit(lsl, usl, gauge_share, bounded_at_zero)
    try:
        measured = read_measurements(path, path.name, column, subgroup)
        values = np.array(measured.values)
        within, total = within_spread(values, measured.subgroups), total_spread(values)
        if within.std == 0.0:
            raise UnusableError("subgroup", "subgroups of equal parts", "measure with a finer gauge, or leave it out")
    except UnusableError as wrong:
        raise InputError([Fault(str(path), OPTION[wrong.key], wrong.found, wrong.allowed)]) from None
    family, notes = (None, []) if not bounded_at_zero else _family(values, path)
    n, mean = len(values), float(values.mean())
    seen = _positive(values) if family is not None else values
    indices = _indices(family, seen, within, total, lsl, usl)
    counted = int(np.sum((values < (-np.inf if lsl is None else lsl)) | (values > (np.inf if usl is None else usl))))
    names = [f"row {row}" for row in measured.rows]
    distance = study.nearest(mean, lsl, usl)
    return Study(
        file=path.name,
        column=measured.column,
        subgroup=subgroup,
        lsl=lsl,
        usl=usl,
        n=n,
        n_subgroups=None if measured.subgroups is None else len(set(measured.subgroups)),
        mean=mean,
        std_within=within.std,
        within_method=within.method,
        std_total=total.std,
        confidence=CONFIDENCE,
        indices=indices,
        cpk_method=NORMAL_CPK if family is None else PERCENTILE_PPK,
        cpk_at_least=None if family is not None else study.at_least(distance, within, n, CONFIDENCE),
        ppk_at_least=None if family is not None else study.at_least(distance, total, n, CONFIDENCE),
        counted=counted,
        modelled_is_beyond_data=indices.modelled_ppm * 1e-6 < 1.0 / (3.0 * n),
        gauge_share=gauge_share,
        without_gauge=None if gauge_share is None else _without_gauge(gauge_share, values, within, total, lsl, usl),
        fit=_fit(family, seen),
        signals=tuple(signals.chart_signals(values, names, measured.subgroups, within.std)),
        outliers=_outliers(family, seen, measured),
        capability_line=_capability_line(measured, indices, counted, family, lsl, usl),
        notes=tuple(notes + _notes(measured, within, total)),
    )


def _refuse_unfit(lsl: float | None, usl: float | None, gauge_share: float | None, bounded_at_zero: bool) -> None:
    faults: list[Fault] = []

    def refuse(option: str, found: str, allowed: str) -> None:
        faults.append(Fault("command line", option, found, allowed))

    if lsl is None and usl is None:
        refuse("--lsl, --usl", "neither", "give the lower limit, the upper one or both")
    for option, limit in (("--lsl", lsl), ("--usl", usl)):
        if limit is not None and not np.isfinite(limit):
            refuse(option, f"{limit}", "give a number, or leave the limit out")
    if lsl is not None and usl is not None and lsl >= usl:
        refuse("--lsl", f"{lsl:g}, with --usl {usl:g}", "the lower limit must lie below the upper one")
    if gauge_share is not None and not 0.0 <= gauge_share < 1.0:
        refuse("--gauge-share", f"{gauge_share:g}", "a share of the variance lies from 0 to below 1 (9 % is 0.09)")
    if bounded_at_zero and gauge_share is not None:
        refuse("--gauge-share", "--bounded-at-zero beside it", "a skewed spread cannot be split so; leave out one")
    if bounded_at_zero and lsl is not None and lsl <= 0.0:
        refuse("--lsl", f"{lsl:g}", "leave it out: nothing can fall below zero, so it is no limit")
    if bounded_at_zero and usl is not None and usl <= 0.0:
        refuse("--usl", f"{usl:g}", "the upper limit must lie above zero")
    if faults:
        raise InputError(faults)


def _family(values: Array, path: Path) -> tuple[Family, list[str]]:
    if values.min() < 0.0:
        found = f"{values.min():g}, though the characteristic is bounded at zero"
        raise InputError([Fault(str(path), "--bounded-at-zero", found, "correct the value, or leave the option out")])
    zeros = int(np.sum(values == 0.0))
    note = f"{zeros} of the values are 0 and count as half the smallest other one: the gauge shows no finer."
    return bounded.best_family(_positive(values)), [note] * (zeros > 0)


def _positive(values: Array) -> Array:
    return np.where(values > 0.0, values, 0.5 * values[values > 0.0].min())


def _indices(
    family: Family | None, values: Array, within: Spread, total: Spread, lsl: float | None, usl: float | None
) -> Indices:
    if family is None:
        return study.normal_indices(float(values.mean()), within, total, len(values), lsl, usl, CONFIDENCE)
    return study.percentile_study(family, values, lsl, usl, CONFIDENCE)


def _without_gauge(
    share: float, values: Array, within: Spread, total: Spread, lsl: float | None, usl: float | None
) -> Indices:
    gauge = share * total.std**2
    return _indices(None, values, study.without_gauge(within, gauge), study.without_gauge(total, gauge), lsl, usl)


def _fit(family: Family | None, values: Array) -> Fit | None:
    if len(values) < signals.FEWEST:
        return None
    return signals.normal_fit(values) if family is None else bounded.fit_of(family, values)


def _outliers(family: Family | None, values: Array, measured: Measurements) -> tuple[Outlier, ...] | None:
    if len(values) < signals.FEWEST:
        return None
    scale = values if family is None else bounded.normal_scores(family, values)
    return tuple(Outlier(measured.rows[i], measured.values[i]) for i in signals.outliers(scale))


def _capability_line(
    measured: Measurements, indices: Indices, counted: int, family: Family | None, lsl: float | None, usl: float | None
) -> str | None:
    """Return the line that stands for the study in a scenario, None where the process lies outside its limits."""
    n = len(measured.values)
    if family is not None:
        keys: dict[str, float] = {"dpmo": indices.modelled_ppm}
        usable = 0.0 < indices.modelled_ppm < 1e6
    else:
        figures = statistics(measured)
        limits = {name: float(limit) for name, limit in (("lsl", lsl), ("usl", usl)) if limit is not None}
        keys = {**limits, "mean": figures["mean"], "std": figures["std"]}
        usable = study.nearest(figures["mean"], lsl, usl) > 0.0
    if not usable:
        return f"capability = {{ bad = {counted}, of = {n} }}" if 0 < counted < n else None
    stated = ", ".join(f"{name} = {value:.12g}" for name, value in keys.items())
    return f"capability = {{ {stated}, sample = {n} }}"


def _notes(measured: Measurements, within: Spread, total: Spread) -> list[str]:
    notes = []
    distinct = len(set(measured.values))
    if distinct < min(10, len(measured.values) // 2):
        notes.append(f"The gauge shows only {distinct} different values: too coarse to judge a distribution by.")
    if total.std > DRIFTS * within.std:
        notes.append(
            f"The total spread is {total.std / within.std:.2f} times the short-term one ({within.method}): the mean "
            "moves, and the short-term figure holds only with a shift that allows for it."
        )
    if len(measured.values) < 30:
        notes.append(f"{len(measured.values)} parts are few: 100 or more narrow the limits to about ±15 %.")
    return notes
