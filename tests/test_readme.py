"""Is what the README shows what the program prints?  `python -m tests.test_readme` writes it anew."""

from __future__ import annotations

import contextlib
import io
import os
import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
README = ROOT / "README.md"
OUTPUT = re.compile(r"<!-- output -->\n```console\n\$ allocator ([^\n]*)\n(.*?)```", re.S)
PYTHON = re.compile(r"<!-- python -->\n```python\n(.*?)```\n\n```text\n(.*?)```", re.S)
VOLATILE = (
    (re.compile(r"\d+(\.\d+)? s\b"), "0.0 s"),
    (re.compile(r"gap \d\.\de[+-]\d+"), "gap 1e-11"),
    (re.compile(r"(?<=,)0\.0(?=,)"), "0"),
)
"""Seconds and the last bits of a gap differ between machines, whether or not it comes to exactly nothing."""
LAST_DIGITS = re.compile(r"\d+\.\d{7,}(e-\d+)?")
"""Full-precision figures are compared as numbers, to 1e-4: beyond a few digits a price depends on the gap reached."""
ROUNDING = 1e-9
"""Full-precision figures below this are the gaps of a solve: they differ between machines."""


def run(arguments: str) -> str:
    command = [sys.executable, "-m", "allocator", *shlex.split(arguments)]
    environment = {**os.environ, "COLUMNS": "80", "NO_COLOR": "1"}
    return subprocess.run(command, capture_output=True, text=True, cwd=ROOT, env=environment, check=True).stdout


def run_python(source: str) -> str:
    printed = io.StringIO()
    with contextlib.chdir(ROOT), contextlib.redirect_stdout(printed):
        exec(compile(source, "README.md", "exec"), {})
    return printed.getvalue()


def settled(text: str) -> str:
    for pattern, stand_in in VOLATILE:
        text = pattern.sub(stand_in, text)
    return LAST_DIGITS.sub(_few_digits, re.sub(r"\s+", " ", text)).strip()


def _few_digits(figure: re.Match[str]) -> str:
    value = float(figure[0])
    return "0" if value < ROUNDING else f"{value:.4g}"


@pytest.mark.parametrize("match", list(OUTPUT.finditer(README.read_text())), ids=lambda m: m[1])
def test_console_output_is_real(match: re.Match[str]) -> None:
    assert match[2].strip(), "run `python -m tests.test_readme` to fill the README"
    assert settled(run(match[1])) == settled(match[2])


def test_python_example_is_real() -> None:
    match = PYTHON.search(README.read_text())
    assert match is not None
    assert match[2].strip()
    assert settled(run_python(match[1])) == settled(match[2])


def write() -> None:
    text = OUTPUT.sub(lambda m: f"<!-- output -->\n```console\n$ allocator {m[1]}\n{run(m[1])}```", README.read_text())
    text = PYTHON.sub(lambda m: f"<!-- python -->\n```python\n{m[1]}```\n\n```text\n{run_python(m[1])}```", text)
    README.write_text(text)


if __name__ == "__main__":
    write()
