"""Do the figures show what the answers say? Their data is tested, not their pixels."""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterator
from dataclasses import replace
from itertools import pairwise
from pathlib import Path
from typing import Any

import matplotlib as mpl
import pytest
from matplotlib import pyplot
from matplotlib.axes import Axes
from typer.testing import CliRunner

import allocator
from allocator import figures
from allocator.cli import app
from allocator.errors import RangeError
from allocator.figures.division import MOST_STEPS as MOST_SHARES
from allocator.figures.style import ACCENT, MID, PALE, plain
from allocator.figures.tree import MOST_STEPS
from allocator.results import CapitalCase, Nines, NinesPoint, Plan, Today
from tests.test_report import a_plan, a_today, nothing_possible, some_nines, step_target

FOLDER = Path(__file__).parent.parent / "scenarios"
HOSTILE = ("$\\frac{1}", "a $x$ b $", "<script>", "\u202eright\nto left", "x" * 300, "%s {} \\")


@pytest.fixture(autouse=True)
def closed() -> Iterator[None]:
    mpl.use("agg")
    yield
    pyplot.close("all")


@pytest.fixture(scope="module")
def scenario() -> allocator.Scenario:
    return allocator.read_scenario(FOLDER / "pump.toml")


@pytest.fixture(scope="module")
def plan(scenario: allocator.Scenario) -> Plan:
    return allocator.make_plan(scenario)


@pytest.fixture(scope="module")
def today(scenario: allocator.Scenario) -> Today:
    return allocator.see_today(scenario)


@pytest.fixture(scope="module")
def nines() -> Nines:
    return allocator.price_nines(allocator.read_scenario(FOLDER / "latch.toml"), points=8)


@pytest.fixture(scope="module")
def case() -> CapitalCase:
    return allocator.capital_case(allocator.read_scenario(FOLDER / "bracket.toml"))


def widths(ax: Axes, label: str) -> list[float]:
    bars = next(bars for bars in ax.containers if bars.get_label() == label)
    return [bar.get_width() for bar in bars]


def names(ax: Axes) -> list[str]:
    return [label.get_text() for label in ax.get_yticklabels()]


def curve(ax: Axes, label: str) -> Any:
    return next(line for line in ax.lines if line.get_label() == label)


# ---------------------------------------------------------------- frontier


def test_frontier_is_the_points(nines: Nines) -> None:
    ax = figures.frontier(nines)
    least = curve(ax, "least total")
    assert list(least.get_xdata()) == [point.nines for point in nines.rows]
    assert list(least.get_ydata()) == [point.total for point in nines.rows]
    assert nines.highest is not None
    assert curve(ax, "highest reachable").get_xdata()[0] == pytest.approx(-math.log10(nines.highest.loss))
    said = " ".join(text.get_text() for text in ax.texts)
    assert "target" in said
    assert "12,930" in said


def test_between_two_points_nothing_is_claimed_but_the_field_they_bound(nines: Nines) -> None:
    ax = figures.frontier(nines)
    assert all(line.get_linestyle() == "None" for line in ax.lines if line.get_label() in ("least total", "points"))
    fields = [
        field.get_paths()[0].get_extents() for field in ax.collections if field.get_label() == "between two points"
    ]
    assert len(fields) == len(nines.rows) - 1
    for field, (before, after) in zip(fields, pairwise(nines.rows), strict=True):
        assert (field.x0, field.x1) == pytest.approx((before.nines, after.nines))
        assert (field.y0, field.y1) == pytest.approx((before.total, after.total))


def test_local_prices_touch_the_curve_with_the_slope_of_the_price(nines: Nines) -> None:
    """A finely asked frontier rises near the target as its price says: by differences of least totals alone."""
    ax = figures.frontier(nines)
    drawn = [line for line in ax.lines if line.get_label() == "local price"]
    whole = [point for point in nines.rows if point.label != "grid" and point.price_per_nine]
    assert len(drawn) == len(whole) > 3
    target = next(point for point in whole if point.label == "target")
    (x0, x1), (y0, y1) = next(
        (d.get_xdata(), d.get_ydata()) for d in drawn if sum(d.get_xdata()) / 2 == pytest.approx(target.nines)
    )
    assert (y0 + y1) / 2 == pytest.approx(target.total)
    scenario, near = allocator.read_scenario(FOLDER / "latch.toml"), 1e-3
    totals = [
        allocator.make_plan(scenario, targets={"final_yield": 10 ** -(target.nines + side)}).money.total  # type: ignore[union-attr]
        for side in (-near, near)
    ]
    assert (y1 - y0) / (x1 - x0) == pytest.approx((totals[1] - totals[0]) / (2 * near), rel=1e-4)


def test_frontier_without_a_price_or_a_point() -> None:
    bare = replace(some_nines().rows[0], price_of_defect_budget=None)
    assert bare.price_per_nine is None
    assert not [line for line in figures.frontier(some_nines(rows=(bare,))).lines if line.get_label() == "local price"]
    assert figures.frontier(some_nines(rows=(), highest=None)).texts


def test_price_per_nine_by_hand() -> None:
    """At 99 %, a budget of -ln 0.99; a nine is 2.302585 of ln(loss), so 2.302585 * 0.01 / 0.99 of the budget."""
    point = NinesPoint("target", 2.0, 0.99, 0.01, 0.99, 0.01, 5.0, None, 1000.0, (), 0.0)
    assert point.price_per_nine == pytest.approx(1000.0 * 2.302585 * 0.01 / 0.99, rel=1e-6)


# ---------------------------------------------------------------- division


def test_division_is_the_budget_and_the_money(plan: Plan) -> None:
    left, right = figures.division(plan)
    assert plan.money is not None
    shares, spent, lost = (
        widths(left, "share of the budget"), widths(right, "improvement"), widths(right, "scrap and rework"),
    )  # fmt: skip
    assert len(shares) == MOST_SHARES
    assert shares[:-1] == sorted(shares[:-1], reverse=True)
    assert sum(shares) == pytest.approx(1.0)
    assert sum(spent) == pytest.approx(plan.money.improvement)
    assert sum(lost) == pytest.approx(plan.money.scrap + plan.money.rework)
    by_name = {row.step: row.budget_share for row in plan.rows}
    for name, share in zip(names(left)[:-1], shares, strict=False):
        assert by_name.get(name, 0.0) == pytest.approx(share)
    assert "servo press (shared)" in names(left)
    assert re.fullmatch(r"\d+ others", names(left)[-1])


def test_division_of_few_steps_adds_nothing_up() -> None:
    left, _ = figures.division(a_plan(purchases=()))
    assert len(names(left)) == len(a_plan().rows)


# ---------------------------------------------------------------- sensitivities


def test_sensitivities_are_the_levers(case: CapitalCase) -> None:
    chosen = case.cases[0]
    ax = figures.sensitivities(case)
    low, high = widths(ax, "figure at its lower end"), widths(ax, "figure at its upper end")
    assert low == pytest.approx([lever.worth_low - chosen.worth_per_year for lever in chosen.levers])
    assert high == pytest.approx([lever.worth_high - chosen.worth_per_year for lever in chosen.levers])
    assert chosen.worth_per_year in [line.get_xdata()[0] for line in ax.lines]
    assert chosen.levers[0].figure in names(ax)[0]


def test_sensitivities_of_a_comparison_that_is_not_there(case: CapitalCase) -> None:
    with pytest.raises(RangeError, match="no comparison 'yesterday'; it has 'today'"):
        figures.sensitivities(case, against="yesterday")


# ---------------------------------------------------------------- worth


def test_worth_is_what_was_weighed() -> None:
    weighed = allocator.weigh_purchases(allocator.read_scenario(FOLDER / "latch.toml"))
    ax = figures.worth(weighed)
    known = sorted((row for row in weighed.rows if row.worth_per_year), key=lambda row: -row.worth_per_year)
    assert [name.split("\n")[0] for name in names(ax)] == [f"{row.step}: {row.alternative}" for row in known]
    drawn = [bought + left for bought, left in zip(widths(ax, "buy"), widths(ax, "leave"), strict=True)]
    assert drawn == pytest.approx([row.worth_per_year for row in known])
    assert [value != 0.0 for value in widths(ax, "buy")] == [row.verdict == "buy" for row in known]
    assert [thing for thing in weighed.rows if thing.verdict == "needed"], "those have no worth, and no bar"
    assert names(ax)[-1].endswith("-4,179 a year; pays up to 78,207, asked 120,000")


# ---------------------------------------------------------------- the line


def column(ax: Axes, label: str) -> list[float]:
    return widths(ax, label)


def drawn_names(ax: Axes, answer: Plan | Today) -> list[str]:
    known = {plain(row.step) for row in answer.rows}
    texts = sorted((text for text in ax.texts if text.get_text() in known), key=lambda text: text.get_position()[1])
    return [text.get_text() for text in texts]


@pytest.mark.parametrize("which", ["plan", "today"])
def test_line_shows_what_arises_is_found_and_lost(which: str, request: pytest.FixtureRequest) -> None:
    answer: Plan | Today = request.getfixturevalue(which)
    ax = figures.line(answer)
    order = drawn_names(ax, answer)
    rows = {row.step: row for row in answer.rows}
    assert sorted(order) == sorted(rows)
    arises = [getattr(rows[name], "target" if which == "plan" else "level").dpu for name in order]
    found, lost = [rows[n].found for n in order], [rows[n].scrap + rows[n].rework for n in order]
    for label, values in (("defects arise", arises), ("are found", found), ("money is lost", lost)):
        bars = column(ax, label)
        assert [bar / max(bars) for bar in bars] == pytest.approx([value / max(values) for value in values])


def test_every_step_stands_above_the_one_it_feeds(today: Today) -> None:
    order = drawn_names(figures.line(today), today)
    place = {name: number for number, name in enumerate(order)}
    assert all(place[row.step] < place[row.feeds] for row in today.rows if row.feeds is not None)
    assert order[-1] == next(row.step for row in today.rows if row.feeds is None)


def test_what_gates_find_and_let_through_is_all_that_arises(today: Today, plan: Plan) -> None:
    """Defects are found somewhere or escape; the escapes are -ln of the shipped yield."""
    for rows, yields in ((today.rows, today.line.yields), (plan.rows, plan.yields)):
        assert yields is not None
        assert yields.shipped_loss is not None
        assert yields.rolled_yield is not None
        arises = -math.log(yields.rolled_yield)
        assert sum(row.found for row in rows) - math.log1p(-yields.shipped_loss) == pytest.approx(arises, rel=1e-9)


def test_branches_have_lanes_of_their_own(today: Today) -> None:
    """Two branches never run over each other: in no lane does a line pass a step that is not its own."""
    ax = figures.line(today)
    steps = {(float(line.get_xdata()[0]), float(line.get_ydata()[0])) for line in ax.lines if line.get_marker() == "o"}
    for line in ax.lines:
        if line.get_marker() == "o":
            continue
        x, y = list(line.get_xdata()), list(line.get_ydata())
        assert not [s for s in steps if s[0] == x[0] and y[0] < s[1] < y[1] and s[1] != y[-1]]


def test_of_very_many_steps_the_telling_ones_are_drawn() -> None:
    rows = [
        step_target(f"S{i}", feeds=f"S{i + 1}" if i < 299 else None, scrap=float(i == 17) * 1e6) for i in range(300)
    ]
    plan = a_plan(rows=tuple(rows))
    ax = figures.line(plan)
    order = drawn_names(ax, plan)
    assert len(order) == MOST_STEPS
    assert {"S17", "S299"} <= set(order)
    assert "240 steps with smaller figures are not drawn" in [text.get_text() for text in ax.texts]


def test_no_line_without_a_plan() -> None:
    with pytest.raises(RangeError, match="no line to draw"):
        figures.line(nothing_possible())


# ---------------------------------------------------------------- the look, names, files


def test_colours_differ_in_lightness_alone() -> None:
    """Grey print keeps them apart, 1.5 to 1 at least: relative luminance and contrast as in WCAG 2.1 (from memory)."""

    def luminance(colour: str) -> float:
        parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
        linear = [part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
        return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]

    dark, middle, light = sorted(luminance(colour) for colour in (ACCENT, MID, PALE))
    assert (middle + 0.05) / (dark + 0.05) > 1.5
    assert (light + 0.05) / (middle + 0.05) > 1.5
    assert (1.0 + 0.05) / (dark + 0.05) > 4.5, "text and bars in the accent can be read on white"


def test_given_axes_are_used(plan: Plan, nines: Nines, today: Today, case: CapitalCase) -> None:
    before = dict(mpl.rcParams)
    _, (one, two) = pyplot.subplots(1, 2)
    assert figures.division(plan, axes=(one, two)) == (one, two)
    for draw, answer in ((figures.frontier, nines), (figures.line, today), (figures.sensitivities, case)):
        _, ax = pyplot.subplots()
        assert draw(answer, ax=ax) is ax  # type: ignore[operator]
    assert dict(mpl.rcParams) == before, "nobody else's figures change their look"


@pytest.mark.parametrize("name", HOSTILE)
def test_names_stay_names(name: str, tmp_path: Path) -> None:
    rows = (step_target(name, feeds="last"), step_target("last"))
    for answer in (a_plan(title=name, currency=name, rows=rows), a_today(), some_nines(currency=name)):
        for path in figures.save_figures(answer, tmp_path):
            assert path.stat().st_size > 1000


def test_signs_that_the_font_lacks_are_boxes_not_errors(tmp_path: Path) -> None:
    assert figures.save_figures(a_plan(rows=(step_target("曲げ"),)), tmp_path)


def test_files_are_the_same_every_time(nines: Nines, tmp_path: Path) -> None:
    first, second = (figures.save_figures(nines, tmp_path / name)[0].read_bytes() for name in ("a", "b"))
    assert first == second
    assert b"http" not in re.sub(
        rb'xmlns(:\w+)?="[^"]*"|<!DOCTYPE[^>]*>|<metadata>.*?</metadata>', b"", first, flags=re.S
    )


@pytest.mark.parametrize(
    ("command", "expected"),
    [
        ("plan", {"division", "line"}),
        ("today", {"line"}),
        ("nines", {"frontier"}),
        ("case", {"sensitivities"}),
        ("weigh", {"worth"}),
    ],
)
def test_commands_write_svg_and_png(command: str, expected: set[str], tmp_path: Path) -> None:
    folder = tmp_path / "new" / "figures"
    answer = CliRunner().invoke(app, [command, str(FOLDER / "latch.toml"), "--json", "--figures", str(folder)])
    assert answer.exit_code == 0, answer.output
    assert json.loads(answer.stdout)
    assert {path.name for path in folder.iterdir()} == {
        f"{name}{form}" for name in expected for form in (".svg", ".png")
    }
    assert answer.stderr.count("Wrote ") == 2 * len(expected)
    assert all(path.read_bytes()[:4] == b"\x89PNG" for path in folder.glob("*.png"))


def test_a_plan_out_of_reach_has_no_figures(tmp_path: Path) -> None:
    assert figures.save_figures(nothing_possible(), tmp_path) == []
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_is_a_file_is_refused(tmp_path: Path) -> None:
    (tmp_path / "taken").touch()
    answer = CliRunner().invoke(app, ["today", str(FOLDER / "latch.toml"), "--figures", str(tmp_path / "taken")])
    assert answer.exit_code == 2
    assert "Traceback" not in answer.stderr
