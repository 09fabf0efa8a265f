"""How a result shows itself where Python is typed: by the words of whoever was named to speak for results.

Results lie below the reports and know nothing of them; the package names the speaker when it is imported, and the
speaker is loaded when a result is first shown.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol, TypeVar


class Speaker(Protocol):
    """Puts a result into words, None for a kind it does not know; in both forms whatever a user wrote stays text."""

    def glance_text(self, result: object) -> str | None: ...

    def glance_html(self, result: object) -> str | None: ...


Kind = TypeVar("Kind")
_speaker: Callable[[], Speaker] | None = None


def speaks_for_results(load: Callable[[], Speaker]) -> None:
    """Name who puts results into words; `load` is called at the first need."""
    global _speaker
    _speaker = load


def shown(kind: type[Kind]) -> type[Kind]:
    """Give a record (a class decorator, above the dataclass's) a readable repr, and a table in a notebook."""
    plain = kind.__repr__

    def as_text(self: Kind) -> str:
        said = None if _speaker is None else _speaker().glance_text(self)
        return plain(self) if said is None else said

    def as_html(self: Kind) -> str | None:
        return None if _speaker is None else _speaker().glance_html(self)

    kind.__repr__ = as_text  # type: ignore[assignment, method-assign]
    kind._repr_html_ = as_html  # type: ignore[attr-defined]
    return kind
