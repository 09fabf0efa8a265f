"""The commands: what they parse, what they call, their exit codes; errors are lines, never tracebacks."""

from __future__ import annotations

import json
import math
import resource
import subprocess
import sys
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import pytest
from test_report import a_check, a_plan, a_today, nothing_possible, out_of_reach, some_nines
from typer.testing import CliRunner

import allocator
from allocator.cli import app
from allocator.errors import Fault, InputError, RangeError, SolverError
from allocator.files import refuse_unfit_file, refuse_unfit_folder

HELP_SECONDS = 0.5
"""Processor time."""
FAULTS = (
    Fault("line.toml, step 'Weld'", "cpk", "-1", "give a number above 0"),
    Fault("line.toml", "demand", "nothing", "add it"),
)
OPENINGS = {
    "plan": "For a final yield of 99.50 %",
    "nines": "What each nine",
    "today": "Today the final yield",
    "check": "File: line.toml",
}


class Api:
    """Stands in for the functions behind the commands and remembers how they were called."""

    def __init__(self) -> None:
        self.calls: list[dict[str, Any]] = []
        self.losses: dict[str, float] = {}
        self.plan: Any = a_plan()
        self.nines: Any = some_nines()

    def answer(self, result: Any, **arguments: Any) -> Any:
        self.calls.append(arguments)
        if isinstance(result, Exception):
            raise result
        return result

    def read_scenario(self, path: Path) -> Any:
        return SimpleNamespace(file=path, target=SimpleNamespace(losses=self.losses))

    def make_plan(self, scenario: Any, **arguments: Any) -> Any:
        return self.answer(self.plan, **arguments)

    def price_nines(self, scenario: Any, **arguments: Any) -> Any:
        return self.answer(self.nines, **arguments)

    def see_today(self, scenario: Any) -> Any:
        return self.answer(a_today())

    def check_scenario(self, scenario: Any) -> Any:
        return self.answer(a_check())

    def write_starter(self, path: Path, as_workbook: bool = False) -> None:
        path.write_text("title = 'a start'\n")


@pytest.fixture
def api(monkeypatch: pytest.MonkeyPatch) -> Api:
    fake = Api()
    for name in ("allocator.api", "allocator.scenario.read", "allocator.scenario.starter"):
        monkeypatch.setitem(sys.modules, name, fake)
    monkeypatch.setattr(allocator, "api", fake, raising=False)
    return fake


def run(*arguments: str) -> Any:
    return CliRunner().invoke(app, list(arguments))


@pytest.mark.parametrize(("command", "opening"), OPENINGS.items())
def test_each_command_prints_text_json_and_csv(api: Api, command: str, opening: str) -> None:
    assert opening in run(command, "line.toml").stdout
    assert json.loads(run(command, "line.toml", "--json").stdout)["title"] == "Frame line"
    assert run(command, "line.toml", "--csv").stdout.split(",")[0] in {"step", "point"}
    both = run(command, "line.toml", "--csv", "--json")
    assert (both.exit_code, both.stdout) == (2, "")
    assert both.stderr.startswith("allocator: command line, --json: found --csv beside it")


def test_plan_passes_targets_as_losses_by_name(api: Api) -> None:
    run("plan", "line.toml", "--shipped-yield", "0.99999999999999999999", "--final-yield", "0.995", "--of", "shipped")
    assert api.calls == [
        {
            "of": "shipped_yield",
            "targets": {"final_yield": 0.005, "shipped_yield": 1e-20},
            "spend": None,
            "capital": None,
            "hold": {},
            "without": (),
            "with_": (),
            "confidence": None,
        }
    ]


@pytest.mark.parametrize(
    ("in_file", "arguments", "want"),
    [
        ({}, ["--nines", "3"], {"final_yield": 1e-3}),
        ({"shipped_yield": 0.1}, ["--nines", "3"], {"shipped_yield": 1e-3}),
        ({"shipped_yield": 0.1, "rolled_yield": 0.1}, ["--ppm", "20"], {"rolled_yield": 2e-5}),
        ({"shipped_yield": 0.1}, ["--final-yield", "0.9", "--of", "shipped", "--nines", "2"],
         {"final_yield": 0.1, "shipped_yield": 1e-2}),
        ({"final_yield": 0.1}, [], None),
    ],
)  # fmt: skip
def test_nines_and_ppm_set_the_yield_that_is_split(
    api: Api, in_file: dict[str, float], arguments: list[str], want: dict[str, float] | None
) -> None:
    api.losses = in_file
    assert run("plan", "line.toml", *arguments).exit_code == 0
    assert api.calls[0]["targets"] == (want if want is None else pytest.approx(want, rel=1e-12))


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["--final-yield", "99.5"], "--final-yield: found 99.5; a yield lies between 0 and 1"),
        (["--final-yield", "1"], "--final-yield: found 1"),
        (["--rolled-yield", "nan"], "--rolled-yield: found nan"),
        (["--shipped-yield", "good"], "--shipped-yield: found good"),
        (["--nines", "0"], "--nines: found 0"),
        (["--nines", "nan"], "--nines: found nan"),
        (["--nines", "99.2"], "--nines: found 99.2; give a number above 0 and at most 15"),
        (["--ppm", "1000000"], "--ppm: found 1e+06"),
        (["--ppm", "3", "--nines", "2"], "both set the same yield"),
        (["--final-yield", "0.9", "--nines", "2"], "both set the same yield"),
        (["--spend", "1", "--capital", "2"], "--spend: found --capital beside it"),
        (["--spend", "-1"], "--spend: found -1"),
        (["--capital", "inf"], "--capital: found inf"),
    ],
)
def test_unfit_arguments_are_refused_in_one_line(api: Api, arguments: list[str], words: str) -> None:
    result = run("plan", "line.toml", *arguments)
    assert (result.exit_code, result.stdout, api.calls) == (2, "", [])
    assert result.stderr.startswith("allocator: command line, --")
    assert words in result.stderr
    assert result.stderr.count("\n") == 1


def test_all_unfit_arguments_are_named_at_once(api: Api) -> None:
    assert run("plan", "line.toml", "--final-yield", "2", "--ppm", "-1").stderr.count("allocator: ") == 2


def test_money_and_points_are_passed_on(api: Api) -> None:
    run("plan", "line.toml", "--spend", "5000")
    run("plan", "line.toml", "--capital", "0")
    run("nines", "line.toml", "--points", "7", "--of", "rolled")
    assert [api.calls[0]["spend"], api.calls[1]["capital"]] == [5000.0, 0.0]
    assert api.calls[2] == {"of": "rolled_yield", "points": 7}


@pytest.mark.parametrize("plan", [out_of_reach(), nothing_possible()])
@pytest.mark.parametrize("form", [[], ["--json"], ["--csv"]])
def test_a_target_out_of_reach_exits_with_1_and_still_answers(api: Api, plan: Any, form: list[str]) -> None:
    api.plan = plan
    result = run("plan", "line.toml", *form)
    assert result.exit_code == 1
    assert result.stdout


def test_nines_without_any_choice_exit_with_1(api: Api) -> None:
    api.nines = some_nines(rows=(), highest=None, optimum_total=None)
    assert run("nines", "line.toml").exit_code == 1


@pytest.mark.parametrize(
    ("error", "code", "lines"),
    [
        (InputError(FAULTS), 2, [f"allocator: {fault}" for fault in FAULTS]),
        (InputError([Fault("a\nb", "", "c\x1b[2J", "d")]), 2, ["allocator: a b: found c [2J; d"]),
        (RangeError("k is 1.2"), 2, ["allocator: k is 1.2"]),
        (SolverError("no answer in time"), 1, ["allocator: no answer in time"]),
        (FileNotFoundError(2, "No such file", "x.toml"), 2, ["allocator: x.toml: No such file"]),
        (OSError("disk gone"), 2, ["allocator: disk gone"]),
    ],
)
def test_errors_become_lines(api: Api, error: Exception, code: int, lines: list[str]) -> None:
    api.plan = error
    result = run("plan", "line.toml")
    assert (result.exit_code, result.stdout) == (code, "")
    assert result.stderr.splitlines() == lines


def test_a_programming_error_is_not_hidden(api: Api) -> None:
    api.plan = ZeroDivisionError()
    assert isinstance(run("plan", "line.toml").exception, ZeroDivisionError)


MISUSES = {
    "plan": "command line, plan: found no FILE; give it: scenario file",
    "compare": "command line, compare: found no FILE FILE...; give it",
    "plan x --nins 3": "command line, plan: found the option --nins; did you mean '--nines'?",
    "--bogus": "command line: found the option --bogus; there is none of that name",
    "fly": "command line: found the command 'fly'; there is none of that name; the commands are new, check",
    "plna x": "command line: found the command 'plna'; did you mean 'plan'?",
    "plan x --of best": "command line, plan, --of: found 'best'; give final, rolled or shipped",
    "plan x --nines=many": "command line, plan, --nines: found 'many'; give a number",
    "rehearse x --units 1.5": "command line, rehearse, --units: found '1.5'; give a whole number",
    "plan x --nines": "command line, plan, --nines: found nothing after it; give its value",
    "plan x --json=3": "command line, plan, --json: found a value; it takes none",
    "plan x y": "command line, plan: found 'y' beside what it takes; leave it out",
    "nines x --points 1": "command line, --points: found 1; give 2 or more",
}


@pytest.mark.parametrize(("arguments", "said"), MISUSES.items())
def test_a_misused_command_is_told_in_one_line(api: Api, arguments: str, said: str) -> None:
    result = run(*arguments.split())
    assert (result.exit_code, result.stdout, api.calls) == (2, "", [])
    assert result.stderr.startswith(f"allocator: {said}")
    assert result.stderr.count("\n") == 1


def test_no_arguments_show_the_help(api: Api) -> None:
    assert "Exit codes" in run().output


UNFIT = {
    "plan line.toml --figures there": "there: found a file at there; name a folder",
    "weigh line.toml --figures there/in": "there/in: found a file at there; name a folder",
    "case line.toml --figures there": "there: found a file at there; name a folder",
    "today line.toml --figures there": "there: found a file at there; name a folder",
    "nines line.toml --figures there": "there: found a file at there; name a folder",
    "plan line.toml --xlsx lost/plan.xlsx": "lost/plan.xlsx: found no folder lost; name a file in a folder that exists",
    "plan line.toml --xlsx folder.xlsx": "folder.xlsx: found a folder; name a file",
    "report line.toml -o lost/page.html": "lost/page.html: found no folder lost",
    "new lost/line.toml": "lost/line.toml: found no folder lost",
    "new folder.xlsx": "folder.xlsx: found a folder; name a file",
}


@pytest.mark.parametrize(("arguments", "said"), UNFIT.items())
def test_what_cannot_be_written_is_found_before_any_work(
    api: Api, arguments: str, said: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "there").write_text("")
    (tmp_path / "folder.xlsx").mkdir()
    result = run(*arguments.split())
    assert (result.exit_code, result.stdout, api.calls) == (2, "", [])
    assert result.stderr.startswith(f"allocator: {said}")
    assert result.stderr.count("\n") == 1
    assert sorted(path.name for path in tmp_path.iterdir()) == ["folder.xlsx", "there"]


def test_a_folder_that_takes_no_files_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(dir: Path) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("allocator.files.tempfile.TemporaryFile", refuse)
    for refuse_unfit in (refuse_unfit_file, refuse_unfit_folder):
        with pytest.raises(InputError, match=r"nothing can be written into .*Permission denied.*; name a place"):
            refuse_unfit(tmp_path / "made")


def test_new_writes_a_starter_once(api: Api, tmp_path: Path) -> None:
    file = tmp_path / "line.toml"
    assert run("new", str(file)).exit_code == 0
    file.write_text("mine")
    again = run("new", str(file))
    assert again.exit_code == 2
    assert "nothing was overwritten" in again.stderr
    assert file.read_text() == "mine"


def test_version_is_printed() -> None:
    assert run("--version").stdout.startswith("allocator ")


@pytest.mark.parametrize("command", ["new", "check", "today", "plan", "nines"])
def test_each_command_explains_itself(command: str) -> None:
    result = run(command, "--help")
    assert result.exit_code == 0
    assert "FILE" in result.stdout


def test_help_answers_at_once_without_the_numerical_libraries() -> None:
    heavy = "numpy scipy cvxpy pandas rich pydantic"
    code = f"import allocator.cli, sys; print(*(m for m in {heavy.split()} if m in sys.modules))"
    assert subprocess.run([sys.executable, "-c", code], capture_output=True, text=True).stdout.strip() == ""
    best = math.inf
    for _ in range(3):
        begun = _seconds_of_children()
        done = subprocess.run([sys.executable, "-m", "allocator", "--help"], capture_output=True, text=True)
        best = min(best, _seconds_of_children() - begun)
        assert done.returncode == 0
        assert "plan" in done.stdout
    assert best < HELP_SECONDS


def _seconds_of_children() -> float:
    """Of the processor, not of the clock: the machine may be busy with other tests."""
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    return used.ru_utime + used.ru_stime


PIPED = """
import sys, types
import allocator
from allocator import cli
from test_cli import Api
fake = Api()
allocator.api = sys.modules["allocator.api"] = sys.modules["allocator.scenario.read"] = fake
sys.stdin.readline()  # Waits until the other end of the pipe is closed.
sys.argv = ["allocator", "plan", "line.toml"]
cli.main()
"""


def test_a_closed_pipe_ends_quietly() -> None:
    process = subprocess.Popen(
        [sys.executable, "-c", PIPED], stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.PIPE,
        text=True, cwd=Path(__file__).parent,
    )  # fmt: skip
    assert process.stdin is not None
    assert process.stdout is not None
    process.stdout.close()
    process.stdout = None
    _, stderr = process.communicate("go\n", timeout=60)
    assert stderr == ""
    assert process.returncode == 141
