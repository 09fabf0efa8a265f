"""What the command line asks for: which yield, its targets, the money it may cost, what is refused or insisted on."""

from __future__ import annotations

from decimal import Decimal, InvalidOperation
from enum import StrEnum
from typing import TYPE_CHECKING, Annotated, Any

import typer

from allocator.cli.app import COMMAND_LINE, refused
from allocator.errors import Fault, InputError

if TYPE_CHECKING:
    from allocator.scenario.model import Scenario


class Which(StrEnum):
    """Which of the three yields; in the order in which the first one set is split."""

    final = "final"
    rolled = "rolled"
    shipped = "shipped"

    @property
    def yield_name(self) -> str:
        return f"{self.value}_yield"


MOST_NINES = 15
"""A loss below that is none that anyone could count: more is a yield in per cent, mistaken for nines."""
Of = Annotated[Which | None, typer.Option("--of", help="The yield whose budget is split and whose nines are priced.")]

Hold = Annotated[
    list[str] | None,
    typer.Option(metavar="STEP=KEY:VALUE", help="Fix a step's level (sigma_level, cpk, dpmo, ppm); repeatable."),
]
Without = Annotated[
    list[str] | None,
    typer.Option(metavar="NAME", help="Ban an alternative, a purchase or a law ('STEP: improve'); repeatable."),
]
With = Annotated[list[str] | None, typer.Option("--with", metavar="NAME", help="Force one; repeatable.")]


def yield_option(which: Which) -> Any:
    text = f"Target for the {which} yield, as a number below 1; overrides the file."
    return typer.Option(f"--{which}-yield", metavar="YIELD", help=text)


def name_of(of: Which | None) -> str | None:
    return None if of is None else of.yield_name


def losses_asked(yields: dict[Which, str], nines: float | None, ppm: float | None) -> dict[Which | None, float]:
    """Losses asked for on the command line; the key None stands for the yield that is split."""
    faults: list[Fault] = []
    losses: dict[Which | None, float] = {}
    allowed = "a yield lies between 0 and 1 (99.5 % is 0.995)"
    for which, text in yields.items():
        loss = _loss(text)
        if loss is None:
            faults.append(Fault(COMMAND_LINE, f"--{which}-yield", text, allowed))
        else:
            losses[which] = loss
    if nines is not None and not 0.0 < nines <= MOST_NINES:
        wanted = (
            f"give a number above 0 and at most {MOST_NINES}, as 3 for a yield of 0.999; --final-yield takes a yield"
        )
        faults.append(Fault(COMMAND_LINE, "--nines", f"{nines:g}", wanted))
    if ppm is not None and not 0.0 < ppm < 1e6:
        faults.append(Fault(COMMAND_LINE, "--ppm", f"{ppm:g}", "give defective units per million, above 0, below 1e6"))
    if nines is not None and ppm is not None:
        faults.append(Fault(COMMAND_LINE, "--nines", "--ppm beside it", "both set the same yield; give one of the two"))
    if faults:
        raise InputError(faults)
    if nines is not None or ppm is not None:
        losses[None] = 10.0**-nines if nines is not None else (ppm or 0.0) / 1e6
    return losses


def _loss(text: str) -> float | None:
    """1 - yield, from the digits as typed: a float of 0.99999999999999999 would already be 1."""
    try:
        loss = float(1 - Decimal(text))
    except (InvalidOperation, ValueError):
        return None
    return loss if 0.0 < loss < 1.0 else None


def split_of(scenario: Scenario, losses: dict[Which | None, float]) -> Which:
    """The first yield that is set, in the file or on the command line."""
    is_set = (which for which in Which if which in losses or which.yield_name in scenario.target.losses)
    return next(is_set, Which.final)


def named(losses: dict[Which | None, float], split: Which) -> dict[str, float] | None:
    if None in losses and split in losses:
        given = f"--nines or --ppm, and --{split}-yield"
        raise refused(f"--{split}-yield", given, "both set the same yield; give one of the two")
    return {(which or split).yield_name: loss for which, loss in losses.items()} or None


def refuse_unfit_money(spend: float | None, capital: float | None) -> None:
    if spend is not None and capital is not None:
        raise refused("--spend", "--capital beside it", "ask for one of the two")
    for option, amount in (("--spend", spend), ("--capital", capital)):
        if amount is not None and not 0.0 <= amount < float("inf"):
            raise refused(option, f"{amount:g}", "give an amount of money, 0 or more")


def refuse_target_beside_money(target: bool, spend: float | None, capital: float | None) -> None:
    """The best yield for the money has no target to meet; one given beside it would go unheard."""
    option = "--spend" if spend is not None else "--capital" if capital is not None else None
    if target and option is not None:
        raise refused(option, "a target beside it", f"{option} asks for the best yield: leave the target out")


def levels_held(texts: list[str]) -> dict[str, dict[str, float]]:
    """The levels that suppliers insist on, by step, from texts as "weld=cpk:1.33"."""
    held: dict[str, dict[str, float]] = {}
    faults: list[Fault] = []
    for text in texts:
        step, _, level = text.rpartition("=")
        key, _, figure = level.partition(":")
        value = _number(figure)
        if not step.strip() or value is None:
            faults.append(Fault(COMMAND_LINE, "--hold", text, "give STEP=KEY:VALUE, as 'weld=cpk:1.33'"))
        elif step.strip() in held:
            faults.append(Fault(COMMAND_LINE, "--hold", text, "a step can be held at one level only; give it once"))
        else:
            held[step.strip()] = {key.strip(): value}
    if faults:
        raise InputError(faults)
    return held


def _number(text: str) -> float | None:
    try:
        return float(text)
    except ValueError:
        return None


def refuse_unfit_confidence(confidence: float | None, spend: float | None, capital: float | None) -> None:
    if confidence is None:
        return
    if not 0.5 <= confidence <= 0.999:
        raise refused("--confidence", f"{confidence:g}", "give a probability from 0.5 to 0.999 (90 % is 0.9)")
    if spend is not None or capital is not None:
        given = "--spend" if spend is not None else "--capital"
        raise refused(
            "--confidence", f"{given} beside it", "a confidence is asked of a target; leave out one of the two"
        )
