"""The capability study as text: indices with limits, parts outside, what looks odd, the line to paste."""

from __future__ import annotations

from allocator.report import words
from allocator.report.paper import LOG_WIDTH, Paper, columns
from allocator.results import Index, Indices, Study

FAMILY_NOTE = "by percentiles of the fitted family: X50 to the limit over X50 to X99.865 (or X0.135)"
NAMES = ("Cp", "Cpk", "Pp", "Ppk")


def measure_text(study: Study, width: int = LOG_WIDTH) -> str:
    """The whole study, from what was measured to the line for the scenario."""
    paper = Paper(width)
    column = f", column {words.quoted(study.column)}" if study.column else ""
    groups = (
        ""
        if study.n_subgroups is None
        else f" in {study.n_subgroups:,} subgroups ({words.clean(study.subgroup or '')})"
    )
    paper.say(f"{words.clean(study.file)}{column}: {study.n:,} parts{groups}; {_limits(study)}.")
    paper.heading(f"Mean {_figure(study.mean)}")
    paper.say(f"Standard deviation {_figure(study.std_within)} short-term ({words.clean(study.within_method)})")
    paper.say(f"Standard deviation {_figure(study.std_total)} total (all parts)")
    _write_indices(paper, study)
    _write_outside(paper, study)
    _write_oddities(paper, study)
    _write_line(paper, study)
    return paper.text()


def _figure(value: float) -> str:
    return f"{value:.6g}"


def _limits(study: Study) -> str:
    stated = [
        f"{name} {_figure(limit)}" for name, limit in (("lsl", study.lsl), ("usl", study.usl)) if limit is not None
    ]
    return " and ".join(stated) + (", one-sided" if len(stated) == 1 else "")


def _write_indices(paper: Paper, study: Study) -> None:
    percent = f"{study.confidence:.0%}"
    paper.heading(f"Capability ({percent} limits, two-sided)")
    figures = ["value", "lower", "upper"]
    heads = columns(["index", "spread"], figures)
    without = study.without_gauge
    if without is not None:
        heads = columns(["index", "spread"], figures + [f"{figure}\nno gauge" for figure in figures])
    rows = []
    for name, spread in zip(NAMES, ("short-term", "short-term", "total", "total"), strict=True):
        cells = _cells(study.indices, name) + (_cells(without, name) if without is not None else [])
        rows.append([name, spread, *cells])
    paper.table(heads, rows, len(rows))
    paper.say(f"Limits: {words.clean(study.cpk_method)}.")
    if study.cpk_at_least is not None and study.ppk_at_least is not None:
        least = f"Cpk at least {words.fixed(study.cpk_at_least)}, Ppk at least {words.fixed(study.ppk_at_least)}"
        paper.say(f"Shown with {percent} confidence, one-sided: {least}.")
    else:
        paper.say(f"Ppk is taken {FAMILY_NOTE}; there is no short-term index.")
    if study.gauge_share is not None:
        removed = f"less {words.share(study.gauge_share)} of the total variance, taken as exact"
        paper.say(f"'no gauge': {removed}; parts are accepted by the gauge, so the raw figures are what counts.")


def _cells(indices: Indices, name: str) -> list[str]:
    index: Index = getattr(indices, name.lower())
    return [words.fixed(value) for value in (index.value, index.lower, index.upper)]


def _write_outside(paper: Paper, study: Study) -> None:
    paper.heading("Parts outside the limits")
    paper.say(f"Counted: {study.counted:,} of {study.n:,} ({words.number(study.counted_ppm)} ppm)")
    family = "normal" if study.fit is None else words.clean(study.fit.family)
    beyond = " - a model, not data: below one in three times the sample" if study.modelled_is_beyond_data else ""
    spread = "total spread" if family == "normal" else "fitted to all parts"
    paper.say(f"Modelled ({family}, {spread}): {words.number(study.modelled_ppm)} ppm{beyond}")
    if study.without_gauge is not None:
        paper.say(f"Modelled without the gauge: {words.number(study.without_gauge.modelled_ppm)} ppm")


def _write_oddities(paper: Paper, study: Study) -> None:
    paper.heading("Is it one steady process?")
    said = [f"{s.chart}: {s.rule} at {words.listed(s.where)}" for s in study.signals]
    paper.bullets(said or ["no rule of the control chart is broken (the rows are taken in the order made)"])
    paper.bullets([_fit(study), _outliers(study), *study.notes])


def _fit(study: Study) -> str:
    fit = study.fit
    if fit is None:
        return "too few parts to judge the distribution"
    family = words.clean(fit.family)
    verdict = f"{family} is doubtful" if fit.doubtful else f"nothing speaks against {family}"
    p = "5 % critical value 0.757" if fit.p is None else f"p {fit.p:.2g}"
    warning = "; the modelled ppm then mean little" if fit.doubtful else ""
    return f"distribution: {verdict} (Anderson-Darling {fit.statistic:.2f}, {p}){warning}"


def _outliers(study: Study) -> str:
    if study.outliers is None:
        return "too few parts to look for outliers"
    if not study.outliers:
        return "no outlier (generalised extreme studentised deviates, 5 %)"
    named = words.listed([f"{_figure(out.value)} in row {out.row}" for out in study.outliers], most=10)
    return f"outliers, kept in every figure: {named}; find out what happened before leaving any out"


def _write_line(paper: Paper, study: Study) -> None:
    if study.capability_line is None:
        paper.heading("No line for the scenario: the process lies outside its limits; state a defect rate instead.")
        return
    paper.heading("For the scenario:")
    paper.verbatim(study.capability_line)
    if study.fit is not None and study.fit.family != "normal":
        return
    spread = "within subgroups" if study.subgroup is not None else "of all parts"
    paper.say(f"(std is the spread {spread}, as {{ data = … }} takes it from the file itself)")
