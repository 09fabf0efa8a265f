"""Do the notebooks run from a clean kernel, show their figures, and lie in the repository without outputs?

`python -m tests.test_notebooks` strips the outputs that working on a notebook leaves behind.
"""

from __future__ import annotations

import json
import os
import re
import warnings
from pathlib import Path
from typing import Any

import pytest

ROOT = Path(__file__).parent.parent
NOTEBOOKS = sorted((ROOT / "notebooks").glob("*.ipynb"))
FIGURES = {"capital_case": 6, "target_split_and_negotiation": 4, "trade_study": 3}
"""How many figures each shows, at least."""
PATIENCE = 600
"""Seconds for one cell: the machine may be busy."""
PRIVATE = re.compile(r"allocator\.(?!figures\b)[a-z_]+\.[a-z]|from allocator\.|\b_[a-z]\w+\(")
"""Marks of anything but the public functions: a module's inside, or a private name."""


def cells(path: Path, kind: str) -> list[dict[str, Any]]:
    return [cell for cell in json.loads(path.read_text(encoding="utf-8"))["cells"] if cell["cell_type"] == kind]


def source(cell: dict[str, Any]) -> str:
    return "".join(cell["source"])


def stripped(content: dict[str, Any]) -> dict[str, Any]:
    """The same notebook without what running it leaves behind."""
    kept = [
        {**cell, "metadata": {}, **({"outputs": [], "execution_count": None} if cell["cell_type"] == "code" else {})}
        for cell in content["cells"]
    ]
    names = {"display_name": "Python 3", "language": "python", "name": "python3"}
    return {**content, "cells": kept, "metadata": {"kernelspec": names, "language_info": {"name": "python"}}}


def test_one_notebook_for_each_user() -> None:
    assert {path.stem for path in NOTEBOOKS} == set(FIGURES)


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.stem)
def test_outputs_are_stripped(path: Path) -> None:
    content = json.loads(path.read_text(encoding="utf-8"))
    assert content == stripped(content), "python -m tests.test_notebooks strips them"


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.stem)
def test_it_reads_as_a_worked_example(path: Path) -> None:
    """Words before every part, the public functions only, and no place but the repository itself."""
    code = "\n".join(source(cell) for cell in cells(path, "code"))
    assert source(cells(path, "markdown")[0]).startswith("# ")
    assert len(cells(path, "markdown")) >= 0.6 * len(cells(path, "code"))
    assert not PRIVATE.findall(code)
    assert not re.findall(r"https?://|/home/|/tmp|subprocess|!pip|%", code.replace(":.2%", ""))


@pytest.fixture
def kernel(monkeypatch: pytest.MonkeyPatch) -> None:
    """A kernel that imports this copy of the program and takes a warning in it for a failure."""
    monkeypatch.setenv("PYTHONPATH", os.pathsep.join(filter(None, (str(ROOT), os.environ.get("PYTHONPATH", "")))))
    monkeypatch.setenv("OPENBLAS_NUM_THREADS", "1")
    monkeypatch.delenv("MPLBACKEND", raising=False)


@pytest.mark.long
@pytest.mark.usefixtures("kernel")
@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.stem)
def test_it_runs_from_a_clean_kernel_and_shows_its_figures(path: Path) -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # Those of the machinery that runs notebooks; the kernel's own show below.
        import nbformat
        from nbclient import NotebookClient

        notebook = nbformat.read(path, as_version=4)
        place = {"metadata": {"path": str(path.parent)}}
        NotebookClient(notebook, timeout=PATIENCE, kernel_name="python3", resources=place).execute()
    outputs = [output for cell in notebook.cells if cell.cell_type == "code" for output in cell.outputs]
    figures = [output for output in outputs if "image/png" in output.get("data", {})]
    assert len(figures) >= FIGURES[path.stem]
    assert [output.text for output in outputs if output.get("name") == "stderr"] == []
    shown = [output.data["text/plain"] for output in outputs if output.output_type == "execute_result"]
    assert any("rows as records" in text for text in shown), "results say their answer"
    assert not any(output.output_type == "display_data" and "image/png" not in output.data for output in outputs)


def strip() -> None:
    for path in NOTEBOOKS:
        content = stripped(json.loads(path.read_text(encoding="utf-8")))
        path.write_text(json.dumps(content, indent=1, ensure_ascii=False) + "\n", encoding="utf-8")


if __name__ == "__main__":
    strip()
