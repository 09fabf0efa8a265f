"""What is wrong where: findings with their owner, nearest-name hints, grouping, and the faults shown to the user."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field

from allocator.errors import Fault

Owner = tuple[str | int, ...]
"""Whose key it is: (), ("demand",), ("purchase", 0), ("step", 3), ("alternative", 3, 0), or a ("row", 7) of no step."""
Damage = set[tuple[Owner, str]]
"""Topics of owners already reported; later checks on them would only repeat the same trouble."""
SHOWN = 3
"""Of many equal faults this many places are named, then "and N more"."""
LONGEST = 60
"""Characters shown of a text that was found."""


@dataclass(frozen=True)
class Finding:
    """A fault whose place is not yet put into words; see `Fault` for the texts."""

    owner: Owner
    key: str
    found: str
    allowed: str

    @property
    def topic(self) -> tuple[Owner, str]:
        return self.owner, topic_of(self.key)


@dataclass
class Places:
    """Where every step, alternative and purchase was written, so that a fault can name it.

    Parameters
    ----------
    file : str
        The scenario file.
    names : dict
        The names that owners bear, where they bear one.
    rows : dict
        (file, row) of what came from a table, row 1 being the header.
    sheets : bool
        Whether the file is a workbook, whose tables are sheets.
    """

    file: str
    names: dict[Owner, str] = field(default_factory=dict)
    rows: dict[Owner, tuple[str, int]] = field(default_factory=dict)
    sheets: bool = False

    def file_of(self, owner: Owner) -> str:
        """Return the file in which the owner was written."""
        return self.rows[owner][0] if owner in self.rows else self.file

    def words(self, owner: Owner) -> str:
        """Return the place within its file, as ``row 17, step 'Weld'``."""
        parts = [f"row {self.rows[owner][1]}"] if owner in self.rows else []
        if owner and owner[0] == "alternative":
            parts.append(self._named("step", ("step", owner[1])))
        parts.extend([self._named(str(owner[0]), owner)] if owner and owner[0] != "row" else [])
        return ", ".join(parts)

    def _named(self, kind: str, owner: Owner) -> str:
        if owner in self.names:
            return f"{kind} '{self.names[owner]}'"
        if len(owner) == 1:
            return f"sheet '{kind}'" if self.sheets else f"[{kind}]"
        return f"{kind} {int(owner[-1]) + 1}"


def topic_of(key: str) -> str:
    """Return what a key is about; the keys of the money at risk are one topic."""
    first = key.split(".")[0]
    return "cost" if first in ("scrap_cost", "cost_added", "salvage") else first


def shown(value: object) -> str:
    """Return what was found, as the user would write it."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, (list, tuple)):
        return "a list"
    # TOML knows dates; everything else that is not a text shows as it was written.
    text = repr(value) if isinstance(value, (str, int, float)) else str(value)
    return text if len(text) <= LONGEST else f"{text[: LONGEST - 4]} …'"


def hint(name: str, known: Iterable[str]) -> str | None:
    """Return the known name nearest to a misspelled one, None where nothing is near.

    >>> hint("oportunities", ["opportunities", "per_unit"])
    'opportunities'
    """
    by_lower = {candidate.lower(): candidate for candidate in known}
    near = difflib.get_close_matches(name.lower(), by_lower, n=1, cutoff=0.6)
    return by_lower[near[0]] if near else None


def did_you_mean(name: str, known: Iterable[str], otherwise: str) -> str:
    """Return the question with the nearest name, or what to do where nothing is near."""
    near = hint(name, known)
    return f"did you mean '{near}'?" if near else otherwise


def listed(names: Iterable[str]) -> str:
    """Return names as a list in words, the longest lists cut."""
    return ", ".join(f"'{name}'" for name in names)


def to_faults(findings: Sequence[Finding], places: Places) -> list[Fault]:
    """Return the faults in file order; many with the same key and remedy in one file become one."""
    groups: dict[tuple[object, ...], list[Finding]] = {}
    for finding in sorted(dict.fromkeys(findings), key=_file_order):
        kind = finding.owner[0] if finding.owner else ""
        group = (places.file_of(finding.owner), kind, finding.key, finding.allowed)
        groups.setdefault(group, []).append(finding)
    faults = [fault for group in groups.values() for fault in _faults_of_group(group, places)]
    return [fault for _, fault in sorted(faults, key=lambda placed: placed[0])]


def _file_order(finding: Finding) -> tuple[int, ...]:
    owner = finding.owner
    if owner and owner[0] in ("step", "alternative"):
        return (2, *(int(part) for part in owner[1:]))
    return (1, *(int(part) for part in owner[1:])) if owner and owner[0] == "purchase" else (0,)


def _faults_of_group(group: list[Finding], places: Places) -> list[tuple[tuple[int, ...], Fault]]:
    """Return the faults of findings with the same key and remedy, each with its place in the file order."""
    if len(group) <= SHOWN:
        return [(_file_order(f), Fault(_where([f], places), f.key, f.found, f.allowed)) for f in group]
    founds = list(dict.fromkeys(f.found for f in group))
    found = " / ".join(founds[:SHOWN]) + (" …" if len(founds) > SHOWN else "")
    return [(_file_order(group[0]), Fault(_where(group, places), group[0].key, found, group[0].allowed))]


def _where(group: Sequence[Finding], places: Places) -> str:
    within = [places.words(f.owner) for f in group[:SHOWN]]
    more = f" and {len(group) - SHOWN:,} more" if len(group) > SHOWN else ""
    return ", ".join(part for part in (places.file_of(group[0].owner), "; ".join(within) + more) if part)
