"""Does the page of a design review hold: the record's figures, a control that shows them, nothing that leaks?"""

from __future__ import annotations

import functools
import io
import itertools
import re
from collections.abc import Iterator
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import pytest
from typer.testing import CliRunner

from allocator import capital_case, make_plan, read_scenario, rehearse, review_page, scenario_from_dict
from allocator.cli import app
from allocator.grouping import feeds_of_rows, reading_order, rows_of
from allocator.report import words
from allocator.report.page import page_html
from allocator.report.page.control import control
from allocator.report.page.scale import Scale
from allocator.results import ReviewPage
from tests import browser

ROOT = Path(__file__).parent.parent
BIGGEST = 1_500_000
LEAST_CONTRAST = 4.5
"""W3C, Web Content Accessibility Guidelines 2.1, success criterion 1.4.3 (level AA), text of ordinary size."""
A4, LETTER = (8.27, 11.69), (8.5, 11.0)
HOSTILE = (
    "<script>window.broken = 1</script>",
    "\"><img src=x onerror='window.broken = 2'> ' \" &amp;",
    "שער \u202eenil\u202c خط",
    "x" * 300,
    "</script><script>window.broken = 3</script>",
)
"""Names that would run, break out of an attribute, turn the line around, or be wider than a phone."""


def long_line(n: int) -> dict[str, Any]:
    """A line of `n` steps with side branches."""
    steps: list[dict[str, Any]] = []
    for i in range(n):
        step: dict[str, Any] = {
            "name": f"station {i + 1}",
            "cost_added": 0.2 + 0.01 * (i % 7),
            "capability": {"dpmo": 60 + 7 * (i % 13)},
            "improve": {"law": "decade", "price": 2000.0 + 150 * (i % 11)},
        }
        if i % 40 == 20 and i + 12 < n:
            step["feeds"] = f"station {i + 12}"
        steps.append(step)
    return {
        "title": f"{n} stations",
        "demand": {"shipped_per_year": 50_000, "years": 5, "discount_rate": 0.08},
        "target": {"final_yield": 0.985},
        "step": steps,
    }


def small_line() -> dict[str, Any]:
    """A tree of five steps with inspection, a safety floor, things to buy, and no target."""
    seen = {"finds": 0.8, "earlier": 0.3, "per_item": 0.02}
    return {
        "title": "Small tree",
        "demand": {"shipped_per_year": 40_000, "years": 6, "discount_rate": 0.08},
        "target": {"escape_cost": 60.0},
        "default": {"inspection": seen, "rework": {"share": 0.4, "cost": 0.9}},
        "purchase": [{"name": "shared oven", "price": 9_000, "evidence": "quoted"}],
        "step": [
            {"name": "pin", "supplier": "Orrin Pins", "feeds": "join", "per_unit": 2, "cost_added": 0.4,
             "capability": {"ppm": 1_900}, "improve": {"law": "decade", "per_item": 0.004}},
            {"name": "plate", "supplier": "Vessen Plates", "cost_added": 1.5, "capability": {"cp": 1.1, "cpk": 0.9},
             "alternative": [{"name": "stop block", "group": "setting", "k": 0.02, "price": 1_500,
                              "evidence": "judged"}]},
            {"name": "join", "cost_added": 0.8, "capability": {"dpmo": 5_200},
             "alternative": [{"name": "oven joint", "uses": "shared oven", "capability": {"dpmo": 900}}]},
            {"name": "bond", "cost_added": 0.3, "capability": {"sigma_level": 3.1}, "safety": True,
             "at_least": {"cpk": 1.1}, "improve": {"law": "power", "exponent": 1.4, "price": 6_000}},
            {"name": "pack", "cost_added": 0.2, "capability": {"ppm": 800}},
        ],
    }  # fmt: skip


def hostile_line() -> dict[str, Any]:
    steps = [
        {
            "name": name,
            "supplier": name,
            "cost_added": 1.0,
            "capability": {"sigma_level": 3.0, "source": name, "evidence": "judged", "note": name},
            "at_least": {"cpk": 1.02},
            "improve": {"law": "power", "exponent": 1.5, "price": 5_000},
        }
        for name in HOSTILE
    ]
    steps[1]["alternative"] = [{"name": "".join(HOSTILE), "capability": {"sigma_level": 4.5}, "price": 90}]
    return {
        "title": HOSTILE[0] + HOSTILE[1],
        "currency": HOSTILE[0],
        "demand": {"shipped_per_year": 20_000, "years": 5, "discount_rate": 0.1},
        "target": {"final_yield": 0.995},
        "step": steps,
    }


@functools.cache
def review(name: str) -> ReviewPage:
    if name == "small":
        return review_page(scenario_from_dict(small_line()))
    if name == "hostile":
        return review_page(scenario_from_dict(hostile_line()))
    if name.isdigit():
        return review_page(scenario_from_dict(long_line(int(name))))
    if name == "out of reach":
        line = long_line(4)
        line["target"] = {"final_yield": {"nines": 9}}
        return review_page(scenario_from_dict(line))
    return review_page(read_scenario(ROOT / "scenarios" / f"{name}.toml"))


@functools.cache
def html(name: str) -> str:
    return page_html(review(name))


class Tags(HTMLParser):
    """Every tag with its attributes, and all text that is shown."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.said: list[str] = []
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_data(self, data: str) -> None:
        self.said.append(data)


# ------------------------------------------------------------------ the record


def test_stops_are_enough_and_hold_today_optimum_target_and_highest() -> None:
    stops = review("latch").stops
    labels = [stop.label for stop in stops]
    assert len(stops) - 2 >= 40
    assert {"today", "economic optimum", "target", "highest reachable"} <= set(labels)
    assert labels[0] == "today"
    assert labels[-1] == "highest reachable"
    assert [stop.nines for stop in stops] == sorted(stop.nines for stop in stops)


def test_stop_of_the_target_is_the_plan() -> None:
    plan, stop = review("latch").plan, review("latch").stops[review("latch").shown]
    assert stop.label == "target"
    assert plan.money == stop.money
    assert [row.target.sigma_level for row in plan.rows] == [at.sigma_low for at in stop.rows]


def test_every_stop_is_the_plan_of_its_promise() -> None:
    scenario, page = read_scenario(ROOT / "scenarios/latch.toml"), review("latch")
    for stop in page.stops[5:50:11]:
        plan = make_plan(scenario, targets={page.plan.split: stop.asked_loss})
        assert plan.money is not None
        assert stop.money is not None
        assert stop.money.total == pytest.approx(plan.money.total, rel=1e-6)


def test_price_per_ppm_is_the_slope_of_the_totals() -> None:
    """Between two stops the total rises by the ppm taken away times a price between those of the two ends."""
    stops = [stop for stop in review("latch").stops if stop.label != "today"]
    assert stops[-1].price_per_ppm is None
    for first, second in itertools.pairwise(stops[2:-1]):
        assert first.money is not None
        assert second.money is not None
        rise = (second.money.total - first.money.total) / (1e6 * (first.asked_loss - second.asked_loss))
        assert first.price_per_ppm is not None
        assert second.price_per_ppm is not None
        assert first.price_per_ppm * (1 - 1e-6) <= rise <= second.price_per_ppm * (1 + 1e-6)


def test_case_and_rehearsal_are_those_of_the_commands() -> None:
    scenario, page = scenario_from_dict(small_line()), review("small")
    assert page.case == capital_case(scenario)
    assert page.rehearsal is not None
    assert page.rehearsal.losses == rehearse(scenario, units=page.rehearsal.units).losses


def test_everything_weighed_and_every_supplier_is_on_the_page() -> None:
    page, said = review("small"), " ".join(Tags(html("small")).said)
    assert page.weighed is not None
    assert page.sheets is not None
    assert len(page.weighed.rows) >= 4
    for row in page.weighed.rows:
        assert row.verdict in ("buy", "leave", "needed")
        assert row.worth_per_year is None or words.money(row.worth_per_year) in said
    for supplier in page.sheets.suppliers:
        assert said.count(supplier.supplier) >= 2


def test_picture_keeps_every_defect() -> None:
    """What is made is found or escapes: over the whole line, today and under the plan (a balance, no model)."""
    for name in ("latch", "small", "250"):
        for state in ("today", "plan"):
            parts = [getattr(part, state) for part in review(name).line]
            assert sum(p.arises for p in parts) == pytest.approx(sum(p.found for p in parts) + parts[-1].hidden)


def test_shares_add_up() -> None:
    for name in ("latch", "250"):
        division = review(name).division
        assert division is not None
        shares = [*division.shares, *([division.rest] if division.rest else [])]
        money = review(name).plan.money
        assert money is not None
        assert sum(share.budget_share for share in shares) == pytest.approx(1.0)
        assert sum(share.improvement for share in shares) == pytest.approx(money.improvement)
        assert sum(share.lost for share in shares) == pytest.approx(money.scrap + money.rework)


@pytest.mark.parametrize(
    "feeds",
    [[*range(1, 250), -1], [249] * 249 + [-1], [min(i - i % 5 + 5, 250) for i in range(250)] + [-1]],
    ids=["serial", "star", "comb"],
)
def test_grouped_rows_are_few_hold_every_step_and_form_a_tree(feeds: list[int]) -> None:
    rows = rows_of(feeds)
    assert len(rows) <= 60
    assert sorted(step for row in rows for step in row) == list(range(len(feeds)))
    onward = feeds_of_rows(feeds, rows)
    assert onward.count(-1) == 1
    order = reading_order(onward)
    place = {row: p for p, row in enumerate(order)}
    assert all(place[row] < place[onward[row]] for row in range(len(rows)) if onward[row] >= 0)


def test_marks_of_a_scale_lie_on_it() -> None:
    for low, high in ((1.07, 1.9), (0.0, 7.3), (2.0, 2.0), (3.1, 3.11)):
        marks = Scale(low, high).marks()
        assert 1 <= len(marks) <= 7
        assert all(low - 1e-9 <= mark <= high + 1e-9 for mark in marks)


# ------------------------------------------------------------------ the file


@pytest.mark.parametrize("name", ["latch", "small", "200", "250", "hostile", "out of reach"])
def test_page_is_one_small_file_that_points_nowhere(name: str) -> None:
    text = html(name)
    assert len(text.encode()) < BIGGEST
    tags = Tags(text)
    for tag, attributes in tags.tags:
        assert tag not in {"img", "iframe", "object", "embed", "base", "form", "a"}
        assert not {"src", "srcset", "action", "onerror", "onload"} & set(attributes)
        if "href" in attributes:
            assert attributes["href"] == "data:,"
    assert not re.search(r"(https?:)?//\w|@import|url\(", text)


@pytest.mark.parametrize(("name", "rows"), [("200", 200), ("250", 51)])
def test_long_lines_are_grouped_beyond_two_hundred_steps(name: str, rows: int) -> None:
    page = review(name)
    assert len(page.rows) == rows
    assert page.grouped == (name == "250")
    levels = [a for tag, a in Tags(html(name)).tags if "data-row" in a]
    assert len(levels) == rows


def test_hostile_names_stay_text() -> None:
    tags = Tags(html("hostile"))
    assert [tag for tag, _ in tags.tags if tag == "script"] == ["script", "script"]
    said = "".join(tags.said)
    for name in HOSTILE:
        assert name.replace("\u202e", "").replace("\u202c", "") in said


def test_out_of_reach_says_what_can_be_reached() -> None:
    page = review("out of reach")
    assert not page.plan.reached
    assert page.stops[page.shown].label == "highest reachable"
    said = " ".join(Tags(html("out of reach")).said)
    assert "cannot be kept" in said
    assert "The best reachable final yield is" in said


def test_line_that_keeps_no_floor_still_has_a_page() -> None:
    line = long_line(2)
    line["step"][0] |= {"at_least": {"cpk": 9.0}}
    page = review_page(scenario_from_dict(line))
    assert page.plan.yields is None
    said = " ".join(Tags(page_html(page)).said)
    assert "No choice at all keeps the floors" in said


def test_capital_too_small_says_how_much_would_do() -> None:
    line = long_line(2) | {"limits": {"capital": 10.0}}
    line["step"][0] |= {"at_least": {"dpmo": 20.0}}
    page = review_page(scenario_from_dict(line))
    said = " ".join(Tags(page_html(page)).said)
    assert "No plan keeps the floors with 10.00 EUR of capital: the least is" in said
    assert "Everything below shows the plan that comes nearest." in said


def test_what_is_too_much_for_the_page_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("allocator.page.MOST_WEIGHED", 1)
    monkeypatch.setattr("allocator.page.MOST_SHEETS", 0)
    page = review_page(read_scenario(ROOT / "scenarios/latch_bought.toml"))
    assert (page.weighed, page.sheets) == (None, None)
    said = " ".join(Tags(page_html(page)).said)
    assert "1 bought parts have a target sheet; a page takes 0, so all of them are left out here." in said
    assert "4 things could be bought, changed or improved; a page takes 1" in said
    assert all("are left out here" not in " ".join(Tags(html(name)).said) for name in ("out of reach", "hostile"))


# ------------------------------------------------------------------ the command


def test_command_writes_the_page(tmp_path: Path) -> None:
    page = tmp_path / "review.html"
    answer = CliRunner().invoke(app, ["report", str(ROOT / "scenarios/latch.toml"), "-o", str(page)])
    assert answer.exit_code == 0, answer.output
    assert page.read_text().startswith("<!doctype html>")
    assert list(tmp_path.iterdir()) == [page]


def test_command_refuses_a_directory_that_does_not_exist(tmp_path: Path) -> None:
    page = tmp_path / "lost" / "review.html"
    answer = CliRunner().invoke(app, ["report", str(ROOT / "scenarios/latch.toml"), "-o", str(page)])
    assert answer.exit_code == 2
    assert "found no folder" in answer.output
    assert not page.parent.exists()


def test_command_exits_1_out_of_reach_and_still_writes(tmp_path: Path) -> None:
    file, page = tmp_path / "line.toml", tmp_path / "line.html"
    text = (ROOT / "scenarios/latch.toml").read_text()
    file.write_text(re.sub(r"(?m)^final_yield = .*$", "final_yield = { nines = 9 }", text))
    answer = CliRunner().invoke(app, ["report", str(file), "-o", str(page)])
    assert answer.exit_code == 1, answer.output
    assert "cannot be kept" in page.read_text()


# ------------------------------------------------------------------ in a browser

in_browser = pytest.mark.skipif(bool(browser.MISSING), reason=browser.MISSING or "never")


@pytest.fixture(scope="module")
def driver() -> Iterator[Any]:
    with browser.started() as started:
        yield started


@pytest.fixture(scope="module")
def page(tmp_path_factory: pytest.TempPathFactory) -> Any:
    folder = tmp_path_factory.mktemp("pages")

    def written(name: str) -> Path:
        file = folder / f"{name}.html"
        file.write_text(html(name))
        return file

    return written


def shown(driver: Any) -> dict[str, Any]:
    """What the page shows of a stop."""
    script = """
      const text = (id) => document.getElementById(id).textContent;
      const cells = (kind) => [...document.querySelectorAll(`.level[data-row] ${kind}`)].map((e) => e.textContent);
      return {yield: text("r-yield"), ppm: text("r-ppm"), nines: text("r-nines"), total: text("r-total"),
              capital: text("r-capital"), price: text("r-price"), label: text("r-label"), against: text("r-against"),
              bought: [...document.querySelectorAll("#r-bought li")].map((e) => e.textContent),
              sigma: cells(".f-sigma"), chosen: cells(".f-chosen"), spend: cells(".f-spend")};
    """
    found: dict[str, Any] = driver.execute_script(script)
    return found


def expected(name: str, stop: int) -> dict[str, Any]:
    made = control(review(name))
    assert made is not None
    texts = made.stops[stop]
    wanted = {key: texts[key] for key in ("yield", "ppm", "nines", "total", "capital", "price", "label", "against")}
    return wanted | {
        "bought": texts["bought"] or ["nothing"],
        "sigma": [row[0] for row in texts["rows"]],
        "chosen": [made.texts[row[3]] for row in texts["rows"]],
        "spend": [row[4] for row in texts["rows"]],
    }


@in_browser
@pytest.mark.parametrize("name", ["latch", "small"])
def test_control_moved_by_keyboard_shows_the_precomputed_plan(driver: Any, page: Any, name: str) -> None:
    from selenium.webdriver.common.by import By
    from selenium.webdriver.common.keys import Keys

    browser.show(driver, page(name))
    slider, at, last = driver.find_element(By.ID, "promise"), review(name).shown, len(review(name).stops) - 1
    assert shown(driver) == expected(name, at)
    for key, goal in (
        (Keys.ARROW_RIGHT, at + 1), (Keys.PAGE_UP, at + 6), (Keys.ARROW_LEFT, at + 5), (Keys.HOME, 0), (Keys.END, last),
        (Keys.ARROW_UP, last), (Keys.PAGE_DOWN, last - 5), (Keys.ARROW_DOWN, last - 6),
    ):  # fmt: skip
        slider.send_keys(key)
        assert shown(driver) == expected(name, goal)
    assert slider.get_attribute("aria-valuetext").startswith(shown(driver)["yield"])
    assert browser.complaints(driver) == []


@in_browser
@pytest.mark.parametrize("width", [1280, 390])
def test_control_moved_by_mouse_shows_the_precomputed_plan(driver: Any, page: Any, width: int) -> None:
    from selenium.webdriver import ActionChains
    from selenium.webdriver.common.by import By

    browser.show(driver, page("small"), width)
    made = control(review("small"))
    assert made is not None
    slider = driver.find_element(By.ID, "promise")
    driver.execute_script("arguments[0].scrollIntoView({block: 'center'})", slider)
    track = driver.execute_script("return document.querySelector('.slot').clientWidth")
    span = made.stops[-1]["x"] - made.stops[0]["x"]

    def away(stop: int) -> float:
        """Pixels from the middle of the control to a stop."""
        return ((made.stops[stop]["x"] - made.stops[0]["x"]) / span - 0.5) * track

    goal = 30
    hand = ActionChains(driver).move_to_element_with_offset(slider, round(away(made.shown)), 0).click_and_hold()
    hand.move_to_element_with_offset(slider, round(away(goal)), 0).release().perform()
    assert shown(driver) == expected("small", goal)
    ActionChains(driver).move_to_element_with_offset(slider, round(away(0)), 0).click().perform()
    assert shown(driver) == expected("small", 0)
    assert browser.complaints(driver) == []


@in_browser
@pytest.mark.parametrize("name", ["latch", "250", "hostile", "out of reach"])
def test_page_asks_for_nothing_and_is_no_wider_than_a_phone(driver: Any, page: Any, name: str) -> None:
    browser.show(driver, page(name), 390)
    assert driver.execute_script("return document.documentElement.scrollWidth") <= 390
    assert driver.execute_script("return window.broken") is None
    asked = browser.asked_for(driver)
    assert [url for url in asked if not url.startswith("data:")] == [page(name).as_uri()]
    assert browser.complaints(driver) == []


@in_browser
@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_every_text_stands_out(driver: Any, page: Any, scheme: str) -> None:
    for name in ("small", "out of reach"):
        browser.show(driver, page(name), 1280, scheme)
        found = browser.contrasts(driver)
        assert len(found) > 100
        assert [pair for pair in found if pair[0] < LEAST_CONTRAST] == []


@in_browser
def test_dark_is_dark_and_light_is_light(driver: Any, page: Any) -> None:
    papers = []
    for scheme in ("light", "dark"):
        browser.show(driver, page("latch"), 1280, scheme)
        papers.append(driver.execute_script("return getComputedStyle(document.body).backgroundColor"))
    sums = [sum(map(int, re.findall(r"\d+", paper))) for paper in papers]
    assert sums[0] > 700
    assert sums[1] < 120


@in_browser
@pytest.mark.parametrize("paper", [A4, LETTER], ids=["A4", "Letter"])
def test_print_has_its_pages(driver: Any, page: Any, paper: tuple[float, float]) -> None:
    pypdf = pytest.importorskip("pypdf")
    browser.show(driver, page("small"))
    pdf = pypdf.PdfReader(io.BytesIO(browser.printed(driver, *paper)))
    texts = [re.sub(r"\s+", " ", sheet.extract_text()) for sheet in pdf.pages]
    assert 6 <= len(texts) <= 14
    assert "Small tree" in texts[0]
    assert "The answer" in texts[0]
    whole = " ".join(texts)
    for said in ("The promise and its price", "What does it rest on?", "planning figures"):
        assert said in whole
    assert "Move the control" not in whole
    sheets = [text for text in texts if re.match(r"(\d+ / \d+ )?Target sheet", text)]
    assert len(sheets) == 2
    for sheet, mine, other in zip(
        sheets, ("Orrin Pins", "Vessen Plates"), ("Vessen Plates", "Orrin Pins"), strict=True
    ):
        assert mine in sheet
        assert other not in sheet
        assert "buyer" not in sheet
