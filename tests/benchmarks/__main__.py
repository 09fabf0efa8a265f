"""Measure the program beside others and print one table; `--write` puts it into the README."""

from __future__ import annotations

import argparse
import re
import sys

from tests.benchmarks.cases import ROOT, Case, cases, end_to_end
from tests.benchmarks.table import text_of

README = ROOT / "README.md"
TABLE = re.compile(r"(<!-- speed -->\n```text\n).*?(```)", re.S)
QUICK_MOST, ROWS = 2_000, 100_000


def main() -> None:
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks", description=__doc__)
    parser.add_argument("--most", type=int, default=1_000_000, help="leave out longer lines")
    parser.add_argument("--seconds", type=float, default=300.0, help="stop a peer after so long (default 300)")
    parser.add_argument("--quick", action="store_true", help="lines up to 2,000 steps, peers for 30 s at most")
    parser.add_argument("--write", action="store_true", help="put the table into the README")
    asked = parser.parse_args()
    most, seconds = (QUICK_MOST, 30.0) if asked.quick else (asked.most, asked.seconds)
    measured: list[Case] = []
    whole = None
    try:
        for case in cases(most, seconds):
            print(f"measured {case.shape.steps:,} steps, {case.shape}", file=sys.stderr)
            measured.append(case)
        whole = end_to_end(min(ROWS, most))
    except KeyboardInterrupt:
        print("stopped: the table holds what was measured so far", file=sys.stderr)
    text = text_of(measured, whole)
    print(text)
    if asked.write:
        README.write_text(TABLE.sub(lambda found: found[1] + text + "\n" + found[2], README.read_text()))


if __name__ == "__main__":
    main()
