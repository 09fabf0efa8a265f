"""Reading a scenario: what is understood from TOML and CSV, and what every broken file is told, word for word."""

from __future__ import annotations

import copy
import math
import time
import tomllib
from pathlib import Path
from typing import Any

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from allocator.errors import Fault, InputError
from allocator.scenario.cross import cross_findings
from allocator.scenario.forms import form_remarks
from allocator.scenario.level import resolve
from allocator.scenario.model import Capability, Scenario
from allocator.scenario.read import read_scenario, scenario_from_dict
from allocator.scenario.starter import STARTER, write_starter

BROKEN = Path(__file__).parent / "broken"
SECONDS_FOR_100_000_ROWS = 10.0
"""Two to four are usual; the rest is room for a slow machine."""
HEAD = "[demand]\nshipped_per_year = 1_000\nyears = 5\ndiscount_rate = 0.1\n"


def faults_of(read: Any, *arguments: Any) -> list[str]:
    with pytest.raises(InputError) as caught:
        read(*arguments)
    return [str(fault) for fault in caught.value.faults]


def scenario(**changes: Any) -> dict[str, Any]:
    """A sound scenario in nested dicts, with some of its keys replaced."""
    sound: dict[str, Any] = {
        "demand": {"shipped_per_year": 1000, "years": 5, "discount_rate": 0.1},
        "step": [{"name": "Weld", "cost_added": 1.0, "capability": {"cp": 1.2}}],
    }
    return sound | changes


def write(folder: Path, name: str, text: str) -> Path:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


# ------------------------------------------------------------------------------------------------ broken files


@pytest.mark.parametrize("path", sorted(BROKEN.glob("*.toml")), ids=lambda path: path.stem)
def test_broken_file_is_told_exactly_this(path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(BROKEN)
    expected = path.with_suffix(".expected").read_text(encoding="utf-8").splitlines()
    assert faults_of(read_scenario, path.name) == expected


def test_every_expectation_has_its_file() -> None:
    assert {p.stem for p in BROKEN.glob("*.expected")} == {p.stem for p in BROKEN.glob("*.toml")}
    assert len(list(BROKEN.glob("*.toml"))) >= 30


def test_file_that_is_none(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "folder.toml").mkdir()
    (tmp_path / "latin.toml").write_bytes(b'title = "x"\n\nnote = "L\xf6ten"\n')
    (tmp_path / "line.xlsx").write_bytes(b"PK")
    assert faults_of(read_scenario, "no.toml") == [
        "no.toml: found no such file; check the name; it was looked for as no.toml"
    ]
    assert faults_of(read_scenario, "folder.toml") == ["folder.toml: found a folder; name a file"]
    assert faults_of(read_scenario, ".") == [".: found a folder; name a file"]
    assert faults_of(read_scenario, "latin.toml") == [
        "latin.toml: found bytes on line 3 that are no UTF-8; save the file as UTF-8"
    ]
    (tmp_path / "line.csv").write_bytes(b"name,cp\n")
    assert "no workbook" in faults_of(read_scenario, "line.xlsx")[0]
    assert "steps_from" in faults_of(read_scenario, "line.csv")[0]


@pytest.mark.parametrize(
    ("text", "found"),
    [
        ("a = " + "[" * 5000, "nested"),
        ("a = " + "9" * 5000, "not TOML"),
        (HEAD + "note = 2024-05-01", "2024-05-01"),
        (HEAD + f"[limits]\ncapital = 1{'0' * 400}", "1000"),
        (HEAD + f"[target]\nfinal_yield = {{ bad = 1, per = 1{'0' * 400} }}", "1000"),
        (HEAD + "[target]\nfinal_yield = nan", "nan"),
        ('steps_from = "nul.csv"\n' + HEAD, "nul.csv"),
    ],
    ids=["nesting", "digits", "date", "huge", "huge target", "nan", "binary table"],
)
def test_odd_files_are_refused_in_words(tmp_path: Path, text: str, found: str) -> None:
    (tmp_path / "nul.csv").write_bytes(b"name,cp\nWeld,\x00" + b"1" * 200_000)
    assert found in "\n".join(faults_of(read_scenario, write(tmp_path, "odd.toml", text)))


def test_each_fault_of_one_step_is_seen_in_one_run() -> None:
    step = {
        "name": "Weld",
        "cost_added": -1,
        "capability": {"cp": 1, "dpmo": 3},
        "improve": {"law": "power", "price": 1},
    }
    keys = [fault.split(", ")[2].split(":")[0] for fault in faults_of(scenario_from_dict, scenario(step=[step]))]
    assert keys == ["cost_added", "capability", "improve.exponent"]


def test_nothing_is_reported_twice() -> None:
    step = {"name": "Weld", "scrap_cots": 1.0, "capability": {"cp": "1.2"}, "feeds": "Pack"}
    last = {"nmae": "Pack", "cost_added": 1.0, "capability": {"cp": 1.2}}
    faults = faults_of(scenario_from_dict, scenario(step=[step, last]))
    assert [fault.split(": found")[0] for fault in faults] == [
        "scenario, step 'Weld', capability.cp",
        "scenario, step 'Weld', scrap_cots",
        "scenario, step 2, nmae",
    ]


@pytest.mark.parametrize("count", [3, 4, 1000])
def test_many_alike_become_one_line(count: int) -> None:
    steps = [{"name": f"S{i}", "cost_added": 1.0, "capability": {"cp": -1.0}} for i in range(count)]
    faults = faults_of(scenario_from_dict, scenario(step=steps))
    if count <= 3:
        assert len(faults) == count
    else:
        assert len(faults) == 1
        assert faults[0].startswith(f"scenario, step 'S0'; step 'S1'; step 'S2' and {count - 3:,} more, capability.cp")


def test_python_callers_data_stays_as_it_is_and_none_means_not_given() -> None:
    capability = {"cp": 1.2, "dpmo": None, "shift": None}
    data = scenario(step=[{"name": "Weld", "cost_added": 1.0, "scrap_cost": None, "capability": capability}])
    assert scenario_from_dict(data).step[0].capability.cp == 1.2
    assert capability == {"cp": 1.2, "dpmo": None, "shift": None}


@pytest.mark.parametrize(
    "junk",
    [
        {},
        {"step": 3},
        {"step": [[]], "demand": 4},
        {"demand": {}, "target": [], "step": [{}]},
        {"purchase": {"name": "x"}},
        {"purchase": [3], "step": [{"alternative": [3, {"copies": 2}]}]},
        {"step": [{"improve": {"law": "quotes", "points": [3, {"cp": []}, {"price": {}}]}}]},
        {"step": [{"name": "a", "capability": {"cp": 1}, "improve": {"up_to": {"cp": {}}, "at": 3}}]},
        {"default": {"inspection": 3, "shift": "x"}, "limits": 2, "steps_from": "s.csv", "alternatives_from": []},
    ],
)
def test_any_junk_is_refused_with_faults_and_no_traceback(junk: dict[str, Any]) -> None:
    assert faults_of(scenario_from_dict, junk)


JUNK: list[Any] = [None, 0, -1, 2.5, 1e308, math.nan, 10**400, "x", "", True, [], {}, [{}], {"cp": 1.0}, [1]]


def places_in(value: Any, path: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    """Every path of keys and positions within nested dicts and lists."""
    entries = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    return [path] * bool(path) + [below for key, inner in entries for below in places_in(inner, (*path, key))]


@given(st.data())
def test_junk_anywhere_is_read_or_refused_but_never_a_crash(data: st.DataObject) -> None:
    broken = tomllib.loads(STARTER)
    for _ in range(data.draw(st.integers(1, 3))):
        path = data.draw(st.sampled_from(places_in(broken)))
        table: Any = broken
        for key in path[:-1]:
            table = table[key]
        table[path[-1]] = copy.deepcopy(data.draw(st.sampled_from(JUNK)))
    try:
        faults: tuple[Any, ...] = () if scenario_from_dict(broken).step else ("no step",)
    except InputError as error:
        faults = error.faults or ("no fault named",)
    assert all(isinstance(fault, Fault) for fault in faults)


# ------------------------------------------------------------------------------------------------ targets


@pytest.mark.parametrize(
    ("written", "loss"),
    [
        (0.9999, 1e-4),
        ({"nines": 12}, 1e-12),
        ({"nines": 20}, 1e-20),
        ({"ppm": 3.4}, 3.4e-6),
        ({"bad": 1, "per": 3}, 1 / 3),
    ],
)
def test_target_keeps_its_loss_exactly(written: Any, loss: float) -> None:
    target = scenario_from_dict(scenario(target={"final_yield": written})).target
    assert target.losses == {"final_yield": pytest.approx(loss, rel=1e-15)}
    assert target.final_yield == 1.0 - target.losses["final_yield"]
    assert target.rolled_yield is None


def test_no_target_is_the_economic_optimum() -> None:
    assert scenario_from_dict(scenario()).target.losses == {}


def test_shipped_target_needs_an_inspection_anywhere() -> None:
    target = {"shipped_yield": 0.99, "escape_cost": 5}
    step = {"name": "Weld", "cost_added": 1.0, "capability": {"cp": 1.2}}
    with_check = {**step, "alternative": [{"name": "check", "inspection": {"finds": 0.5}}]}
    assert "no step states an inspection" in faults_of(scenario_from_dict, scenario(target=target))[0]
    assert scenario_from_dict(scenario(target=target, step=[with_check])).target.escape_cost == 5
    assert scenario_from_dict(scenario(target=target, default={"inspection": {}})).target.losses


# ------------------------------------------------------------------------------------------------ tables


STEPS = """\
name;supplier;feeds;cost_added;cp;capability.cpk;k;sample;inspection.finds;improve.law;improve.price;improve.up_to;\
improve.up_to.dpmo;safety;at_least.cpk
Shaft; Ferrowick ;Press;2.5;1.3;;0.1;120.0;0.9;decade;100;4.8;;yes;1.0

Press;;;1e0;1.2;1.1;;;;decade;100;;40;no;
"""


def test_csv_says_the_same_as_toml(tmp_path: Path) -> None:
    write(tmp_path, "steps.csv", "\ufeff" + STEPS)
    write(tmp_path, "alts.csv", "step,name,group,price,cp,k,capability.k,copies.installed,copies.needed\n"
          "Press,centre,setting,5,,0.02,,,\nPress,new,,90,1.6,,0.1,2,1\n")  # fmt: skip
    from_csv = read_scenario(
        write(tmp_path, "csv.toml", 'steps_from = "steps.csv"\nalternatives_from = "alts.csv"\n' + HEAD)
    )
    same = (
        HEAD
        + """
[[step]]
name = "Shaft"
supplier = "Ferrowick"
feeds = "Press"
cost_added = 2.5
capability = { cp = 1.3, k = 0.1, sample = 120 }
inspection = { finds = 0.9 }
improve = { law = "decade", price = 100, up_to = 4.8 }
safety = true
at_least = { cpk = 1.0 }

[[step]]
name = "Press"
cost_added = 1
capability = { cp = 1.2, cpk = 1.1 }
improve = { law = "decade", price = 100, up_to = { dpmo = 40 } }

[[step.alternative]]
name = "centre"
group = "setting"
price = 5
k = 0.02

[[step.alternative]]
name = "new"
price = 90
capability = { cp = 1.6, k = 0.1 }
copies = { installed = 2, needed = 1 }
"""
    )
    from_toml = read_scenario(write(tmp_path, "toml.toml", same))
    assert from_csv.model_dump(exclude={"file"}) == from_toml.model_dump(exclude={"file"})


def test_rows_stand_before_the_tables_of_the_file(tmp_path: Path) -> None:
    write(tmp_path, "parts.csv", "name,feeds,cost_added,ppm\nBolt,Pack,0.1,50\nNut,,0.1,40\n")
    own = '\n[[step]]\nname = "Pack"\ncost_added = 1.0\ncapability = { cp = 1.2 }\n'
    read = read_scenario(write(tmp_path, "line.toml", 'steps_from = "parts.csv"\n' + HEAD + own))
    assert [step.name for step in read.step] == ["Bolt", "Nut", "Pack"]


def test_alternatives_of_the_file_stand_before_rows(tmp_path: Path) -> None:
    write(tmp_path, "alts.csv", "step,name,cp\nPack,late,1.5\n")
    own = '\n[[step]]\nname = "Pack"\ncost_added = 1.0\ncapability = { cp = 1.2 }\n'
    own += '\n[[step.alternative]]\nname = "early"\ncapability = { cp = 1.4 }\n'
    read = read_scenario(write(tmp_path, "line.toml", 'alternatives_from = "alts.csv"\n' + HEAD + own))
    assert [a.name for a in read.step[0].alternative] == ["early", "late"]


@pytest.mark.parametrize("separator", [",", ";", "\t"])
def test_separator_is_seen_in_the_header(tmp_path: Path, separator: str) -> None:
    rows = [
        ["name", "cost_added", "cp", "note"],
        ["Weld", "1.0", "1.2", '"one; two, three\nfour"'],
        ["Pack", "2", "1.3", ""],
    ]
    write(tmp_path, "steps.csv", "\n".join(separator.join(row) for row in rows))
    read = read_scenario(write(tmp_path, "line.toml", 'steps_from = "steps.csv"\n' + HEAD))
    assert [(s.name, s.cost_added, s.note) for s in read.step] == [
        ("Weld", 1.0, "one; two, three\nfour"),
        ("Pack", 2.0, None),
    ]


def test_100_000_rows_are_no_wall(tmp_path: Path) -> None:
    header = "name,supplier,cost_added,cp,cpk,dpmo,inspection.finds,improve.law,improve.exponent,improve.price,evidence"
    rows = (f"S{i},Q{i % 9},1.5,{'1.3,1.1,' if i % 2 else ',,500'},0.9,power,1.2,{i},quoted" for i in range(100_000))
    write(tmp_path, "steps.csv", "\n".join([header, *rows]))
    path = write(tmp_path, "line.toml", 'steps_from = "steps.csv"\n' + HEAD)
    start = time.process_time()
    read = read_scenario(path)
    assert time.process_time() - start < SECONDS_FOR_100_000_ROWS
    assert len(read.step) == 100_000
    assert (read.step[-1].name, read.step[-1].capability.cpk) == ("S99999", 1.1)


def test_20_000_broken_rows_are_a_few_lines(tmp_path: Path) -> None:
    rows = (f"S{i},{i / 1e5},1.{i % 7}" for i in range(20_000))
    write(tmp_path, "steps.csv", "\n".join(["name,cp,cpk", *rows]))
    faults = faults_of(read_scenario, write(tmp_path, "line.toml", 'steps_from = "steps.csv"\n' + HEAD))
    assert [fault.split(": found")[0] for fault in faults] == [
        "steps.csv, row 2, step 'S0', capability.cp",
        "steps.csv, row 2, step 'S0'; row 3, step 'S1'; row 4, step 'S2' and 19,997 more, scrap_cost",
        "steps.csv, row 3, step 'S1'; row 4, step 'S2'; row 5, step 'S3' and 19,996 more, capability.cpk",
    ]


# ------------------------------------------------------------------------------------------------ measurements


def test_measurements_become_mean_std_and_sample(tmp_path: Path) -> None:
    write(tmp_path, "parts.csv", "id;width\na;2.0\nb;\nc;2.1\nd;2.3\n")
    step = {"name": "Weld", "cost_added": 1.0, "capability": {"data": "parts.csv", "column": "width", "usl": 3.0}}
    read = scenario_from_dict(scenario(step=[step]), "line.toml", tmp_path).step[0].capability
    # Mean 6.4/3; squares of the deviations sum to 7/150, over n − 1 = 2.
    assert read.mean == pytest.approx(6.4 / 3, rel=1e-15)
    assert read.std == pytest.approx(math.sqrt(7 / 300), rel=1e-13)
    assert (read.sample, read.data, read.usl, read.lsl) == (3, "parts.csv", 3.0, None)


def test_a_column_of_bare_numbers_needs_no_header(tmp_path: Path) -> None:
    write(tmp_path, "parts.csv", "2.0\n2.1\n2.3\n")
    alternative = {"name": "new", "capability": {"data": "parts.csv", "lsl": 1.0, "usl": 3.0}}
    step = {"name": "Weld", "cost_added": 1.0, "capability": {"cp": 1.2}, "alternative": [alternative]}
    read = scenario_from_dict(scenario(step=[step]), "line.toml", tmp_path).step[0].alternative[0].capability
    assert read is not None
    assert (read.sample, read.mean) == (3, pytest.approx(6.4 / 3))


def test_files_need_a_folder() -> None:
    step = {"name": "Weld", "cost_added": 1.0, "capability": {"data": "parts.csv", "usl": 3.0}}
    assert "no folder" in faults_of(scenario_from_dict, scenario(step=[step]))[0]
    assert "no folder" in faults_of(scenario_from_dict, scenario(steps_from="steps.csv"))[0]


# ------------------------------------------------------------------------------------------------ rules between keys


def test_net_cost_added_may_be_zero_up_to_rounding() -> None:
    parts = [
        {"name": f"P{i}", "feeds": "Pack", "per_unit": 3, "scrap_cost": 0.1, "capability": {"cp": 1.2}}
        for i in range(3)
    ]
    pack = {"name": "Pack", "scrap_cost": 0.9, "capability": {"cp": 1.2}}
    assert len(scenario_from_dict(scenario(step=[*parts, pack])).step) == 4
    less = {**pack, "scrap_cost": 0.9 * (1 - 1e-8)}
    assert "step 'Pack', scrap_cost" in faults_of(scenario_from_dict, scenario(step=[*parts, less]))[0]


def test_a_scrap_cost_stands_for_the_accumulated_cost_from_there_on() -> None:
    steps = [
        {"name": "A", "cost_added": 4.0, "salvage": 1.0, "capability": {"cp": 1.2}},
        {"name": "B", "scrap_cost": 3.0, "capability": {"cp": 1.2}},
        {"name": "C", "cost_added": 1.0, "salvage": 1.0, "capability": {"cp": 1.2}},
    ]
    # w: 4 − 1 = 3, then 3, then 3 + 1 − 1 = 3: nowhere less than what came in.
    assert len(scenario_from_dict(scenario(step=steps)).step) == 3
    steps[2]["salvage"] = 1.1
    assert "2.9 lost per item scrapped here, but 3 lost" in faults_of(scenario_from_dict, scenario(step=steps))[0]


@pytest.mark.parametrize("priced", [{"price": 5}, {"trade_in": 5}, {"resale": 5}])
def test_horizon_is_needed_only_once_something_has_a_price(priced: dict[str, float]) -> None:
    free = {"name": "new", "capability": {"cp": 1.5}, "per_year": 7, "price": 0}
    step = {"name": "Weld", "cost_added": 1.0, "capability": {"cp": 1.2}, "alternative": [free]}
    demand = {"shipped_per_year": 1000}
    assert scenario_from_dict(scenario(demand=demand, step=[step])).demand.years is None
    step["alternative"] = [free | priced]
    assert "years and discount_rate" in faults_of(scenario_from_dict, scenario(demand=demand, step=[step]))[0]


def test_ten_thousand_combinations_are_allowed() -> None:
    groups = [{"name": f"{g}{i}", "group": str(g)} for g in range(4) for i in range(9)]
    step = {"name": "Weld", "cost_added": 1.0, "capability": {"cp": 1.2}, "alternative": groups}
    assert len(scenario_from_dict(scenario(step=[step])).step[0].alternative) == 36
    step["alternative"] = [*groups, {"name": "more", "group": "3"}]
    assert "11,000 combinations" in faults_of(scenario_from_dict, scenario(step=[step]))[0]


def test_second_pass_finds_nothing_in_a_sound_scenario() -> None:
    assert cross_findings(scenario_from_dict(scenario())) == []


FIGURES = st.floats(-1e3, 1e3, allow_nan=False).map(lambda x: round(x, 3))
POSITIVE = st.floats(1e-9, 1e3, allow_nan=False)
PROBABILITY = st.floats(1e-15, 1.0, exclude_max=True)
CAPABILITIES = st.fixed_dictionaries(
    {},
    optional={
        "sigma_level": POSITIVE, "cp": POSITIVE, "cpk": FIGURES, "pp": POSITIVE, "ppk": FIGURES,
        "lsl": FIGURES, "usl": FIGURES, "mean": FIGURES, "std": POSITIVE,
        "yield": PROBABILITY, "dpmo": PROBABILITY.map(lambda p: 1e6 * p), "item_yield": PROBABILITY,
        "bad": st.integers(0, 9), "of": st.integers(1, 9),
        "k": st.floats(0.0, 1.0, exclude_max=True), "sides": st.sampled_from([1, 2]),
    },
)  # fmt: skip
KEYS = [
    {"sigma_level"}, {"cp", "cpk"}, {"cpk"}, {"pp", "ppk"}, {"lsl", "usl", "mean", "std"}, {"usl", "mean", "std"},
    {"lsl", "usl", "std", "k"}, {"yield", "k"}, {"dpmo", "sides"}, {"item_yield"}, {"bad", "of"},
]  # fmt: skip


@given(CAPABILITIES, st.sampled_from(KEYS), POSITIVE)
@example({"bad": 0, "of": 1}, {"bad", "of"}, 0.015625)
@example({"dpmo": 1e-310}, {"dpmo"}, 1.0)
@example({"cp": 1e3, "cpk": 1e-16}, {"cp", "cpk"}, 1.0)
@example({"lsl": 0.0, "usl": 1.0, "mean": 5e-324, "std": 1.0}, {"lsl", "usl", "mean", "std"}, 1.0)
def test_what_the_rules_let_pass_can_be_resolved(figures: dict[str, Any], keys: set[str], opportunities: float) -> None:
    capability = Capability.model_validate({key: value for key, value in figures.items() if key in keys})
    if not form_remarks(capability, opportunities):
        level = resolve(capability, opportunities)
        assert 0.0 <= level.k < 1.0
        assert math.isfinite(level.sigma_level)
        assert level.attribute or level.sigma_level > 0.0


# ------------------------------------------------------------------------------------------------ starter


def test_the_starter_reads_without_a_fault_and_is_never_overwritten(tmp_path: Path) -> None:
    path = tmp_path / "line.toml"
    write_starter(path)
    read = read_scenario(path)
    laws = {step.improve.law for step in read.step if step.improve is not None}
    assert isinstance(read, Scenario)
    assert "quotes" in laws
    assert len(laws) > 1
    assert any(step.alternative for step in read.step)
    assert any(step.inspection for step in read.step)
    assert any(step.at_least for step in read.step)
    assert read.target.losses
    path.write_text("mine")
    assert "nothing was overwritten" in faults_of(write_starter, path)[0]
    assert path.read_text() == "mine"
    assert [p.name for p in tmp_path.iterdir()] == ["line.toml"]
