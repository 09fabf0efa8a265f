"""What can go wrong, said once: where, what was found, what is allowed, what to do.

AllocatorError
├── InputError            the scenario or a command's argument is wrong (exit 2); carries every fault found
├── RangeError            a pure function was asked outside its valid range (a ValueError too)
├── OutOfReachError       there is no plan that meets the target, and the question needs one (exit 1)
└── SolverError           a solver stopped without an answer that could be proved
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass


class AllocatorError(Exception):
    """Root of every error that a user may meet."""


@dataclass(frozen=True)
class Fault:
    """One thing wrong with an input.

    Parameters
    ----------
    where : str
        File, then the table or step by name, as ``"line.toml, step 'Weld'"``.
    key : str
        The key at fault (``""`` when a whole table is at fault).
    found : str
        What was found there.
    allowed : str
        What is allowed, and what to do about it.
    """

    where: str
    key: str
    found: str
    allowed: str

    def __str__(self) -> str:
        place = f"{self.where}, {self.key}" if self.key else self.where
        return f"{place}: found {self.found}; {self.allowed}"


class InputError(AllocatorError):
    """The input is wrong; every fault found is listed, not only the first."""

    def __init__(self, faults: Sequence[Fault]):
        self.faults = tuple(faults)
        super().__init__("\n".join(str(fault) for fault in self.faults))


class RangeError(AllocatorError, ValueError):
    """A figure lies outside the range in which a formula is valid."""


class OutOfReachError(AllocatorError):
    """The target cannot be met, and what was asked needs a plan that meets it."""


class SolverError(AllocatorError):
    """A solver stopped without a usable answer."""
