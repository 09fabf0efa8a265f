"""Capability from measurements: against certified data, published limits, scipy and statsmodels, and in simulation."""

from __future__ import annotations

import json
import math
import tomllib
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import scipy.stats
from scipy.special import chdtri, nctdtrit
from statsmodels.stats.diagnostic import normal_ad
from typer.testing import CliRunner

from allocator import Study, measure_capability, read_scenario, scenario_from_dict, see_today
from allocator.bounded import Family, best_family, fitted, outside, percentile_indices
from allocator.cli import app
from allocator.errors import InputError, RangeError
from allocator.report.render import render
from allocator.signals import chart_signals, in_a_row, normal_fit, outliers
from allocator.spread import D2, D3, c4, moving_range_spread, pooled_within, total_spread
from allocator.study import normal_indices, percentile_study

DRAWS = 10_000
CERTIFIED = 1e-12
SIRSTV = Path(scipy.stats.__file__).parent / "tests" / "data" / "nist_anova"
"""NIST statistical reference data for one-way analysis of variance, as they come with scipy."""
BORE = Path(__file__).parent.parent / "scenarios" / "bracket_bore.csv"


def nist(name: str) -> tuple[np.ndarray[Any, Any], list[str], float]:
    """The values, their groups and the certified standard deviation within groups."""
    text = (SIRSTV / f"{name}.dat").read_text()
    certified = float(text.split("Standard Deviation")[1].split()[0])
    rows = [line.split() for line in text.rsplit("Data:", 1)[1].splitlines()[1:] if line.strip()]
    return np.array([float(value) for _, value in rows]), [group for group, _ in rows], certified


def written(path: Path, values: Sequence[float], lots: Sequence[str] | None = None) -> Path:
    rows = ["size" if lots is None else "lot,size"]
    rows += [repr(float(v)) if lots is None else f"{lot},{float(v)!r}" for v, lot in zip(values, lots or values)]  # noqa: B905
    path.write_text("\n".join(rows))
    return path


@pytest.mark.parametrize(("name", "digits"), [("SiRstv", CERTIFIED), ("SmLs01", CERTIFIED), ("SmLs04", 1e-8)])
def test_spread_within_is_the_certified_one(name: str, digits: float) -> None:
    """SmLs04 repeats seven leading digits, which its values can hold only to 1e-8 of their spread."""
    values, groups, certified = nist(name)
    assert pooled_within(values, groups)[0] == pytest.approx(certified, rel=digits)


def test_a_study_reports_the_certified_figures(tmp_path: Path) -> None:
    values, groups, certified = nist("SiRstv")
    study = measure_capability(written(tmp_path / "r.csv", values, groups), column="size", subgroup="lot", usl=197.0)
    assert (study.n, study.n_subgroups) == (25, 5)
    assert study.std_within == pytest.approx(certified, rel=CERTIFIED)
    assert study.mean == pytest.approx(math.fsum(values) / 25, rel=CERTIFIED)
    # Total sum of squares = between + within (certified: 5.11462616e-2 and 2.16636560e-1).
    assert study.std_total == pytest.approx(math.sqrt((5.11462616e-2 + 2.16636560e-1) / 24), rel=1e-9)


@pytest.mark.parametrize(("offset", "spread", "digits"), [(1_000_000.2, 0.1, 1e-9), (10_000_000.2, 0.1, 1e-8)])
def test_numerically_hard_values(tmp_path: Path, offset: float, spread: float, digits: float) -> None:
    """NumAcc3 and NumAcc4 of the NIST univariate reference data: 1001 values, mean 1000000.2 (10000000.2), SD 0.1."""
    values = [offset] + [round(offset - spread, 1), round(offset + spread, 1)] * 500
    study = measure_capability(written(tmp_path / "n.csv", values), usl=offset + 1)
    assert study.mean == pytest.approx(offset, rel=1e-14)
    assert study.std_total == pytest.approx(spread, rel=digits)


# The NIST/SEMATECH handbook, 6.1.6, gives the formulas; worked figures: Montgomery, Introduction to Statistical
# Quality Control (from memory): USL 62, LSL 38, s 1.75, n 20 gives 1.57 ≤ Cp ≤ 3.01 (with Cp rounded to 2.29).
def test_cp_limits_of_a_textbook() -> None:
    values = np.array([48.25, 51.75] * 10)
    values = 50.0 + (values - 50.0) * 1.75 / float(np.std(values, ddof=1))
    spread = total_spread(values)
    cp = normal_indices(50.0, spread, spread, 20, 38.0, 62.0, 0.95).cp
    assert cp.value == pytest.approx(2.2857, abs=1e-4)
    assert (cp.lower, cp.upper) == pytest.approx((1.56494, 3.00558), abs=1e-4)


def test_indices_of_the_handbook_example() -> None:
    """NIST/SEMATECH e-Handbook 6.1.6: USL 20, LSL 8, mean 16, s 2 gives Cp 1.0 and Cpk 0.6667."""
    values = 16.0 + 2.0 * np.array([-1.0, 1.0] * 500) * math.sqrt(999 / 1000)
    spread = total_spread(values)
    seen = normal_indices(16.0, spread, spread, 1000, 8.0, 20.0, 0.95)
    assert seen.cp.value == pytest.approx(1.0, abs=1e-9)
    assert seen.ppk.value == pytest.approx(2.0 / 3.0, abs=1e-9)
    assert seen.modelled_ppm == pytest.approx(1e6 * (scipy.stats.norm.sf(2.0) + scipy.stats.norm.cdf(-4.0)), rel=1e-9)


def test_constants_of_control_charts() -> None:
    """Usual table of factors (ASTM E2587; from memory): c4, d2 and D4 of a range of two."""
    assert c4(np.array([2, 5, 10, 25])) == pytest.approx([0.7979, 0.9400, 0.9727, 0.9896], abs=5e-5)
    d2, d4 = D2, 1.0 + 3.0 * D3 / D2
    assert (d2, d4) == pytest.approx((1.128, 3.267), abs=5e-4)


@pytest.mark.parametrize("n", [10, 30, 100])
def test_limits_of_total_indices_cover(n: int) -> None:
    """95 % limits cover 93.5 to 96.5 % in 10,000 draws: Pp; Ppk with one limit, and with two, off-centre or not."""
    rng = np.random.default_rng(n)
    x = rng.standard_normal((DRAWS, n))
    mean, spread = x.mean(axis=1), x.std(axis=1, ddof=1)
    ratio = 1.0 / spread
    low, high = (ratio * math.sqrt(chdtri(n - 1, tail) / (n - 1)) for tail in (0.975, 0.025))
    assert 0.935 <= np.mean((low <= 1.0) & (high >= 1.0)) <= 0.965
    # The limits of an index contain the truth when the index lies between these two quantiles.
    least, most = (nctdtrit(n - 1, 3.0 * math.sqrt(n) * 1.33, tail) / (3.0 * math.sqrt(n)) for tail in (0.025, 0.975))
    for k in (None, 0.0, 0.3):
        half = 3.99 / (1.0 - (k or 0.0))
        off = mean if k is None else np.abs(mean + (k * half))
        index = ((3.99 if k is None else half) - off) / (3.0 * spread)
        assert 0.935 <= np.mean((index >= least) & (index <= most)) <= 0.965


@pytest.mark.parametrize("n", [10, 30, 100])
def test_limits_by_moving_ranges_cover(n: int) -> None:
    x = np.random.default_rng(n).standard_normal((DRAWS, n))
    short = np.abs(np.diff(x, axis=1)).mean(axis=1) / D2
    law = moving_range_spread(x[0])
    of_law, nu = short * law.of_law / law.std, law.degrees
    low, high = (math.sqrt(chdtri(nu, tail) / nu) / of_law for tail in (0.975, 0.025))
    assert 0.935 <= np.mean((low <= 1.0) & (high >= 1.0)) <= 0.965
    assert np.mean(short) == pytest.approx(1.0, abs=0.01)
    index, root = (3.99 - x.mean(axis=1)) / (3.0 * of_law), 3.0 * math.sqrt(n)
    least, most = (nctdtrit(nu, root * 1.33, tail) / root for tail in (0.025, 0.975))
    assert 0.935 <= np.mean((index >= least) & (index <= most)) <= 0.965


@pytest.mark.parametrize("family", [Family("lognormal", 0.0, 0.5), Family("Weibull", 1.0, 2.0)], ids=lambda f: f.name)
@pytest.mark.parametrize("n", [30, 100])
def test_limits_by_percentiles_cover_as_often_as_stated(
    family: Family, n: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Refits are dear: 400 draws, whose own error is about 1.2 %; at 30 parts the limits fall short (about 92 %)."""
    monkeypatch.setattr("allocator.study.REFITS", 300)
    usl = float(family.quantile(0.9999))
    truth = float(percentile_indices(family, None, usl)[1])
    samples = family.draw(np.random.default_rng(n), (400, n))
    found = [percentile_study(fitted(family.name, x), x, None, usl, 0.95).ppk for x in samples]
    covers = np.mean([index.lower <= truth <= index.upper for index in found])  # type: ignore[operator]
    assert 0.90 <= covers <= 0.98


@pytest.mark.parametrize("n", [20, 200])
def test_fitted_families_agree_with_scipy(n: int) -> None:
    x = np.random.default_rng(n).weibull(1.7, n) * 0.3
    shape, _, scale = scipy.stats.weibull_min.fit(x, floc=0)
    family = fitted("Weibull", x)
    assert (family.first, family.second) == pytest.approx((scale, shape), rel=1e-4)
    assert family.likelihood(x) == pytest.approx(
        float(np.sum(scipy.stats.weibull_min.logpdf(x, shape, 0, scale))), rel=1e-6
    )
    logs = fitted("lognormal", x)
    law = scipy.stats.lognorm(logs.second, 0, np.exp(logs.first))
    assert logs.quantile(0.99865) == pytest.approx(law.ppf(0.99865), rel=1e-12)
    assert outside(logs, 0.01, 2.0) == pytest.approx(law.sf(2.0) + law.cdf(0.01), rel=1e-9)
    assert logs.likelihood(x) == pytest.approx(float(np.sum(law.logpdf(x))), rel=1e-9)


@pytest.mark.parametrize("seed", range(4))
def test_normality_agrees_with_statsmodels(seed: int) -> None:
    x = np.random.default_rng(seed).standard_normal(40) ** (1 + 2 * (seed % 2))
    a, p = normal_ad(x)
    fit = normal_fit(x)
    assert fit.p == pytest.approx(p, rel=1e-9)
    assert fit.statistic == pytest.approx(a * (1.0 + 0.75 / 40 + 2.25 / 1600), rel=1e-9)
    assert fit.doubtful == (p < 0.05)


# Rosner, Technometrics 25 (1983) 165-172, as worked in the NIST/SEMATECH handbook 1.3.5.17.3 (from memory): the first
# statistic is 3.118 and there are three outliers.
ROSNER = (
    -0.25, 0.68, 0.94, 1.15, 1.20, 1.26, 1.26, 1.34, 1.38, 1.43, 1.49, 1.49, 1.55, 1.56, 1.58, 1.65, 1.69, 1.70, 1.76,
    1.77, 1.81, 1.91, 1.94, 1.96, 1.99, 2.06, 2.09, 2.10, 2.14, 2.15, 2.23, 2.24, 2.26, 2.35, 2.37, 2.40, 2.47, 2.54,
    2.62, 2.64, 2.90, 2.92, 2.92, 2.93, 3.21, 3.26, 3.30, 3.59, 3.68, 4.30, 4.64, 5.34, 5.42, 6.01,
)  # fmt: skip


def test_outliers_of_a_worked_example(tmp_path: Path) -> None:
    values = np.array(ROSNER)
    assert np.max(np.abs(values - values.mean())) / values.std(ddof=1) == pytest.approx(3.118, abs=1e-3)
    assert sorted(values[outliers(values)]) == [5.34, 5.42, 6.01]
    study = measure_capability(written(tmp_path / "r.csv", ROSNER), usl=7.0)
    assert study.outliers is not None
    assert [(out.row, out.value) for out in study.outliers] == [(55, 6.01), (54, 5.42), (53, 5.34)]
    assert study.mean == pytest.approx(float(np.mean(values))), "an outlier stays in every figure"


def test_chart_rules() -> None:
    names = [f"row {i}" for i in range(2, 32)]
    steady = np.tile([1.0, -1.0, 0.5, -0.5], 8)[:30]
    assert chart_signals(steady, names, None, 1.0) == []
    far = steady.copy()
    far[10] = 5.0
    assert ("single values", ("row 12",)) in [(s.chart, s.where) for s in chart_signals(far, names, None, 1.0)]
    lots = [f"lot {i // 3}" for i in range(30)]
    shifted = steady + np.where(np.arange(30) >= 15, 4.0, 0.0)
    rules = {s.rule for s in chart_signals(shifted, names, lots, 1.0)}
    assert "beyond three standard errors" in rules
    rising = chart_signals(np.arange(30.0), names, None, 1.0)
    assert "6 in a row rising or falling" in {s.rule for s in rising}
    assert not in_a_row(np.array([1.0] * 8 + [-1.0] * 8), 9).any()


def test_steady_processes_rarely_signal() -> None:
    """Nine in a row and three standard errors: the mean chart of 25 normal subgroups mostly stays silent."""
    rng = np.random.default_rng(9)
    lots = [str(i // 4) for i in range(100)]
    loud = 0
    for _ in range(200):
        loud += bool(chart_signals(rng.standard_normal(100), [""] * 100, lots, 1.0))
    assert loud / 200 <= 0.30


@pytest.mark.parametrize(
    ("options", "subgroups"),
    [
        ({"lsl": 19.0, "usl": 21.5}, False), ({"lsl": 19.0, "usl": 21.5, "subgroup": "lot"}, True),
        ({"usl": 21.5}, False), ({"lsl": 18.5, "subgroup": "lot"}, True),
    ],
)  # fmt: skip
def test_the_line_and_the_file_mean_the_same_level(tmp_path: Path, options: dict[str, Any], subgroups: bool) -> None:
    """Pasted or read from the file: the same sigma level; with subgroups the short-term one, 3·Cpk/(1 − k)."""
    lots = [str(i // 5) for i in range(60)]
    path = written(tmp_path / "m.csv", 20.0 + 0.4 * np.random.default_rng(3).standard_normal(60), lots)
    study = measure_capability(path, column="size", **options)
    assert study.capability_line is not None
    limits = {key: value for key, value in options.items() if key != "subgroup"}
    of_file = {"data": "m.csv", "column": "size", **options}
    pasted = tomllib.loads(study.capability_line)["capability"]

    def sigma(capability: dict[str, Any]) -> float:
        step = {"name": "a", "scrap_cost": 1.0, "capability": capability}
        scenario = scenario_from_dict({"demand": {"shipped_per_year": 1.0}, "step": [step]}, folder=tmp_path)
        return see_today(scenario).rows[0].level.sigma_level

    assert sigma(pasted) == pytest.approx(sigma(of_file), rel=1e-9)
    spread = study.std_within if subgroups else study.std_total
    if len(limits) == 2:
        assert sigma(pasted) == pytest.approx(1.25 / spread, rel=1e-9)
    else:
        near = study.indices.cpk if subgroups else study.indices.ppk
        assert sigma(pasted) == pytest.approx(3.0 * (near.value or 0.0), rel=1e-9)


def test_a_bounded_characteristic(tmp_path: Path) -> None:
    values = np.random.default_rng(8).lognormal(-3.0, 0.5, 200)
    path = written(tmp_path / "flat.csv", values)
    study = measure_capability(path, usl=0.3, bounded_at_zero=True)
    family = best_family(values)
    assert family.name == "lognormal"
    law = scipy.stats.lognorm(np.log(values).std(ddof=1), 0, np.exp(np.log(values).mean()))
    ppk = (0.3 - law.ppf(0.5)) / (law.ppf(0.99865010196837) - law.ppf(0.5))
    assert study.indices.ppk.value == pytest.approx(ppk, rel=1e-9)
    assert study.indices.cpk.value is None
    assert study.modelled_ppm == pytest.approx(1e6 * law.sf(0.3), rel=1e-9)
    assert study.modelled_is_beyond_data
    assert "a model, not data" in render(study)
    assert study.capability_line == f"capability = {{ dpmo = {study.modelled_ppm:.12g}, sample = 200 }}"
    # The normal model, wrong here, misses the tail by orders of magnitude, and says that it is doubtful.
    normal = measure_capability(path, usl=0.3)
    assert normal.modelled_ppm < 0.01 * study.modelled_ppm
    assert normal.fit is not None
    assert normal.fit.doubtful


def test_zeros_of_a_coarse_gauge_are_kept(tmp_path: Path) -> None:
    study = measure_capability(
        written(tmp_path / "z.csv", [0.0, 0.01, 0.02, 0.01, 0.03] * 4), usl=0.1, bounded_at_zero=True
    )
    assert study.n == 20
    assert any("4 of the values are 0" in note for note in study.notes)
    assert any("too coarse" in note for note in study.notes)


def test_gauge_share_is_shown_beside_the_raw_figures() -> None:
    raw = measure_capability(BORE, column="bore_mm", lsl=20.0, usl=20.033)
    less = measure_capability(BORE, column="bore_mm", lsl=20.0, usl=20.033, gauge_share=0.19)
    assert raw.without_gauge is None
    assert less.indices == raw.indices
    assert less.without_gauge is not None
    assert less.without_gauge.pp.value == pytest.approx((raw.indices.pp.value or 0.0) / 0.9, rel=1e-12)
    assert less.without_gauge.modelled_ppm < raw.modelled_ppm
    assert less.capability_line == raw.capability_line
    with pytest.raises(RangeError, match="explain all of the spread"):
        measure_capability(BORE, column="bore_mm", lsl=20.0, usl=20.033, gauge_share=0.99)


def test_the_shipped_measurements_mean_what_the_scenario_reads() -> None:
    study = measure_capability(BORE, column="bore_mm", lsl=20.0, usl=20.033)
    scenario = read_scenario(BORE.parent / "bracket.toml")
    step = next(step for step in scenario.step if step.name == "bore")
    assert (study.mean, study.std_total, study.n) == (step.capability.mean, step.capability.std, step.capability.sample)


def test_json_has_its_keys() -> None:
    answer = CliRunner().invoke(app, ["measure", str(BORE), "--column", "bore_mm", "--usl", "20.033", "--json"])
    assert answer.exit_code == 0
    told = json.loads(answer.stdout)
    wanted = ["n", "mean", "std_within", "std_total", "cp", "cpk", "pp", "ppk", "counted_ppm", "modelled_ppm"]
    assert list(told)[:10] == wanted
    assert told["cp"] == {"value": None, "lower": None, "upper": None}
    assert told["ppk"]["lower"] < told["ppk"]["value"] < told["ppk"]["upper"]
    sheet = CliRunner().invoke(app, ["measure", str(BORE), "--column", "bore_mm", "--usl", "20.033", "--csv"])
    assert sheet.stdout.splitlines()[4].startswith("raw,ppk,0.9")


BAD: dict[str, tuple[str, dict[str, Any], str]] = {
    "missing": ("", {"usl": 1.0}, "no such file"),
    "no column": ("a,b\n1,2\n3,4\n", {"usl": 1.0}, "name one of the columns a, b"),
    "misspelt": ("width,b\n1,2\n3,4\n", {"column": "widht", "usl": 1.0}, "did you mean 'width'"),
    "twice": ("a,a\n1,2\n3,4\n", {"column": "a", "usl": 1.0}, "which the file has twice"),
    "text": ("a\n1\nx\n3\n", {"usl": 1.0}, "'x' in row 3"),
    "comma": ("a;b\n1,5;2\n2,5;4\n", {"column": "a", "usl": 9.0}, "'1,5' in row 2"),
    "one": ("a\n1\n", {"usl": 1.0}, "1 measurement; a spread needs at least 2"),
    "equal": ("a\n1\n1\n1\n", {"usl": 1.0}, "all 3 measurements equal 1"),
    "huge": ("a\n1\n1e300\n", {"usl": 1.0}, "'1e300' in row 3"),
    "no limit": ("a\n1\n2\n", {}, "give the lower limit, the upper one or both"),
    "crossed": ("a\n1\n2\n", {"lsl": 2.0, "usl": 1.0}, "must lie below the upper one"),
    "gauge": ("a\n1\n2\n", {"usl": 1.0, "gauge_share": 1.2}, "from 0 to below 1"),
    "lots": ("a,lot\n1,x\n2,y\n", {"column": "a", "subgroup": "lot", "usl": 1.0}, "2 subgroups of one part each"),
    "no lot": ("a,lot\n1,x\n2,\n", {"column": "a", "subgroup": "lot", "usl": 1.0}, "nothing in row 3"),
    "equal lots": ("a,lot\n1,x\n1,x\n2,y\n2,y\n", {"column": "a", "subgroup": "lot", "usl": 1.0}, "equal parts"),
    "below zero": ("a\n1\n-2\n", {"usl": 1.0, "bounded_at_zero": True}, "bounded at zero; correct"),
    "limit at zero": ("a\n1\n2\n", {"lsl": 0.0, "bounded_at_zero": True}, "so it is no limit"),
}


@pytest.mark.parametrize("case", BAD)
def test_bad_input_is_one_clear_message(tmp_path: Path, case: str) -> None:
    text, options, message = BAD[case]
    path = tmp_path / "m.csv"
    if text:
        path.write_text(text)
    with pytest.raises(InputError) as refused:
        measure_capability(path, **options)
    assert len(refused.value.faults) == 1
    assert message in str(refused.value)


def test_a_process_outside_its_limits_is_given_as_a_count(tmp_path: Path) -> None:
    path = written(tmp_path / "m.csv", [1.0, 2.0, 3.0, 4.0])
    study = measure_capability(path, usl=1.5)
    assert study.capability_line == "capability = { bad = 3, of = 4 }"
    assert (study.indices.ppk.value or 0.0) < 0.0
    assert measure_capability(path, usl=0.5).capability_line is None


@pytest.mark.parametrize("options", [{}, {"gauge_share": 0.1}, {"bounded_at_zero": True, "lsl": None}])
def test_the_sheet_fits_eighty_columns(options: dict[str, Any]) -> None:
    study: Study = measure_capability(BORE, column="bore_mm", **{"lsl": 20.0, "usl": 20.033, **options})
    wide = [line for line in render(study).splitlines() if len(line) > 80]
    assert all(line.startswith("capability = ") for line in wide)
