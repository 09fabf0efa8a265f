"""Does the house keep its own rules: layers, light import, public names, file sizes, documented commands?"""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
LONGEST_FILE = 400
PUBLIC = {
    "AllocatorError", "CapitalCase", "Check", "Comparison", "InputError", "Nines", "Plan", "Rehearsal", "Review",
    "Scenario", "Study", "SupplierSheets", "Today", "Weighed", "capital_case", "check_scenario", "compare_scenarios",
    "make_plan",
    "measure_capability", "price_nines", "read_scenario", "rehearse", "review_page", "review_table",
    "scenario_from_dict", "see_today", "supplier_sheets", "weigh_purchases", "write_workbook",
}  # fmt: skip
HEAVY = ("numpy", "scipy", "cvxpy", "pandas", "pydantic", "rich", "matplotlib", "openpyxl")


def test_layers_point_one_way(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(ROOT)
    linter = Path(sys.executable).parent / "lint-imports"
    answer = subprocess.run([linter, "--no-cache"], capture_output=True, text=True)
    assert answer.returncode == 0, answer.stdout
    assert "4 kept, 0 broken" in answer.stdout


def test_public_names_are_pinned_and_exist() -> None:
    import allocator

    assert set(allocator.__all__) == PUBLIC
    for name in allocator.__all__:
        assert getattr(allocator, name).__name__ == name
    with pytest.raises(AttributeError, match="nonsense"):
        _ = allocator.nonsense


def test_import_is_light() -> None:
    script = f"import sys, allocator; print([m for m in {HEAVY!r} if m in sys.modules])"
    seen = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert seen.stdout.strip() == "[]"


def test_no_file_is_over_400_lines() -> None:
    long = {p.name: n for p in ROOT.glob("allocator/**/*.py") if (n := len(p.read_text().splitlines())) > LONGEST_FILE}
    assert long == {}


def test_every_module_says_first_what_it_answers() -> None:
    silent = [
        str(p)
        for p in ROOT.glob("allocator/**/*.py")
        if p.stat().st_size and not p.read_text().startswith(('"""', 'r"""'))
    ]
    assert silent == []


def test_every_command_is_in_the_readme() -> None:
    from typer.main import get_command

    from allocator.cli import app

    readme = (ROOT / "README.md").read_text()
    missing = [name for name in get_command(app).commands if f"allocator {name}" not in readme]  # type: ignore[attr-defined]
    assert missing == []
