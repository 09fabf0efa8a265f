"""Settings for all tests."""

from __future__ import annotations

import os
from typing import Any

import pytest

# The matrices are small: threads that wait for each other cost more than they save, above all on a busy machine.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")


@pytest.hookimpl(optionalhook=True)
def pytest_xdist_make_scheduler(config: pytest.Config, log: Any) -> Any:
    """Neighbours stay in one process, so that what a module has planned once is not planned again in the other."""
    if config.getoption("dist") != "load":
        return None
    from xdist.scheduler import WorkStealingScheduling

    return WorkStealingScheduling(config, log)
