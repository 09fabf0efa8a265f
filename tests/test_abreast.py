"""Does work on several processes answer as work done here, in order, and pass on what went wrong?"""

from __future__ import annotations

import math
import os
from pathlib import Path

import pytest

from allocator import weigh
from allocator.abreast import abreast
from allocator.errors import SolverError
from allocator.money import capital_recovery
from allocator.scenario.read import read_scenario

LATCH = Path(__file__).parent.parent / "scenarios" / "latch.toml"


@pytest.mark.parametrize("workers", [1, 2])
def test_answers_come_in_the_order_of_the_tasks(workers: int) -> None:
    done: list[int] = []
    assert abreast(math.factorial, range(9), workers, lambda: done.append(1)) == [math.factorial(n) for n in range(9)]
    assert len(done) == 9


@pytest.mark.parametrize("workers", [1, 2])
def test_what_goes_wrong_reaches_whoever_asked(workers: int) -> None:
    with pytest.raises(ValueError, match="not defined for negative"):
        abreast(math.factorial, [3, -1, 4], workers, lambda: None)


def test_a_worker_that_ends_is_said() -> None:
    with pytest.raises(SolverError, match="ended before it had answered"):
        abreast(os._exit, [3, 3], 2, lambda: None)


def test_work_is_really_done_elsewhere() -> None:
    assert os.getpid() not in abreast(_pid_after, [1.0, 2.0], 2, lambda: None)


def _pid_after(_: float) -> int:
    return os.getpid()


def test_functions_of_this_package_can_be_sent() -> None:
    assert abreast(_yearly, [(0.1, 5.0), (0.0, 4.0)], 2, lambda: None)[1] == 0.25


def _yearly(terms: tuple[float, float]) -> float:
    return capital_recovery(*terms)


def test_weighing_on_two_processes_is_weighing_here(monkeypatch: pytest.MonkeyPatch) -> None:
    scenario = read_scenario(LATCH)
    alone = weigh.weigh_purchases(scenario)
    monkeypatch.setattr(weigh, "LONG", 0.0)
    monkeypatch.setattr(weigh, "cores", lambda: 2)
    assert weigh.weigh_purchases(scenario).rows == alone.rows
