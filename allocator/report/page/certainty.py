"""Why the plan can be believed: the proof that nothing is cheaper, and the line played through unit by unit."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from allocator.report import words
from allocator.report.rehearsal_text import METHOD, played, verdict
from allocator.results import Plan, Rehearsal, Rehearsed


@dataclass(frozen=True)
class PlayedSaid:
    said: list[str]
    rows: list[list[str]]
    """Figure, computed, counted, from, to."""
    method: str


def proof_said(plan: Plan) -> list[str]:
    """The bound and the gap in sentences."""
    proof = plan.proof
    if proof is None:
        return []
    total = f"This plan costs {words.per_year(proof.total, plan.currency)}."
    if proof.lower_bound is None:
        texts = [total, "No lower bound is proven."]
    else:
        gap = words.UNKNOWN if proof.gap is None else f"{proof.gap:.1e}"
        bound = words.per_year(proof.lower_bound, plan.currency)
        as_good = "keeps the same promises" if plan.reached else "comes as near to what was asked"
        texts = [
            f"{total} No plan that {as_good} can cost less than {bound}: the proven gap is {gap} of it.",
            f"How it was found: {words.found_by(proof.method)}.",
            "Every figure was worked out again from the finished choice alone.",
        ]
    return [*texts, words.clean(proof.note)] if proof.note else texts


def played_said(rehearsal: Rehearsal | None) -> PlayedSaid | None:
    """The rehearsal: its yields and its money beside the computed ones."""
    if rehearsal is None:
        return None
    rows = [_row(words.yield_name(name), _turned(loss), _yield) for name, loss in rehearsal.losses.items()]
    rows += [_row(f"{kind}, {words.clean(rehearsal.currency)} a year", figure, words.money)
             for kind, figure in rehearsal.money.items() if kind not in ("inspection", "improvement")]  # fmt: skip
    return PlayedSaid([played(rehearsal), verdict(rehearsal)], rows, METHOD)


def _turned(loss: Rehearsed) -> Rehearsed:
    """A loss with its interval the other way round, as its yield will be."""
    return Rehearsed(loss.computed, loss.simulated, loss.upper, loss.lower)


def _yield(loss: float) -> str:
    return words.percent(1.0 - loss, loss)


def _row(name: str, figure: Rehearsed, show: Callable[[float], str]) -> list[str]:
    computed = "–" if figure.computed is None else show(figure.computed)
    return [name, computed, show(figure.simulated), f"{show(figure.lower)} to {show(figure.upper)}"]
