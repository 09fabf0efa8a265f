"""Figures as people read them: thousands separators, units, and as many digits as the loss deserves."""

from __future__ import annotations

import math
import re
import unicodedata
from collections.abc import Iterable, Sequence
from decimal import Decimal

UNKNOWN = "not known"
YIELDS = ("rolled_yield", "final_yield", "shipped_yield")
_DIRECTION_MARKS = frozenset("\u061c\u200e\u200f\u202a\u202b\u202c\u202d\u202e\u2066\u2067\u2068\u2069")
_SMALLEST_SHOWN_LOSS = 1e-12
_LARGEST_WRITTEN_OUT = 1e15


def clean(text: str) -> str:
    """Text a user wrote, safe for a terminal and a log: one line, no control or direction marks.

    >>> clean("Press\\x1b[31m\\nline")
    'Press [31m line'
    """
    if text.isascii() and text.isprintable() and "  " not in text and text.strip() == text:
        return text  # as nearly all names are, of which a long line has many
    kept = (" " if unicodedata.category(sign) == "Cc" else sign for sign in text if sign not in _DIRECTION_MARKS)
    return " ".join("".join(kept).split())


def quoted(name: str) -> str:
    return f"'{clean(name)}'"


def listed(parts: Sequence[str], most: int = 6, more: str = "more", joint: str = ", ") -> str:
    """Parts in a row, the rest counted.

    >>> listed(["a", "b", "c"], most=2)
    'a, b and 1 more'
    """
    text = joint.join(parts[:most])
    return text if len(parts) <= most else f"{text} and {len(parts) - most:,} {more}"


def nines_of(loss: float) -> float | None:
    """Nines of a yield with this loss, -log10(loss); None where the loss is 0 or not a number."""
    return abs(math.log10(loss)) if 0.0 < loss <= 1.0 else None


def _scientific(value: float) -> str:
    return f"{value:.1e}"


def number(value: float | None) -> str:
    """A plain figure with three or so digits that count.

    >>> [number(x) for x in (1234567.8, 66807.2, 31.67, 3.398, 0.5733, 0.00198, 1.2e-7, 0.0)]
    ['1,234,568', '66,807', '31.7', '3.40', '0.57', '0.0020', '1.2e-07', '0']
    """
    if value is None or not math.isfinite(value):
        return UNKNOWN
    size = abs(value)
    if size == 0.0:
        return "0"
    if size < 1e-4 or size >= _LARGEST_WRITTEN_OUT:
        return _scientific(value)
    if size < 1.0:
        return f"{value:.{1 - math.floor(math.log10(size))}f}"
    decimals = 2 if size < 9.995 else 1 if size < 99.95 else 0
    return f"{value:,.{decimals}f}"


def count(value: float | None) -> str:
    """A number of things: whole where it is whole.

    >>> count(4.0), count(0.5)
    ('4', '0.50')
    """
    whole = value is not None and abs(value) < _LARGEST_WRITTEN_OUT and value == int(value)
    return f"{value:,.0f}" if whole else number(value)


def money(value: float | None) -> str:
    """An amount, without its unit: whole from a thousand, else with two decimals; less than half a cent is nothing.

    >>> [money(x) for x in (1234567.4, -999.5, 0.0, 0.001)]
    ['1,234,567', '-999.50', '0', '0']
    """
    if value is None or not math.isfinite(value) or abs(value) >= _LARGEST_WRITTEN_OUT:
        return number(value)
    if abs(value) < 0.005:
        return "0"
    return f"{value:,.0f}" if abs(value) >= 999.995 else f"{value:,.2f}"


def unit_cost(value: float | None) -> str:
    """An amount per unit, without its unit: four digits that count, where two decimals would hide what parts two plans.

    >>> unit_cost(0.129304), unit_cost(5.5932), unit_cost(1234.5), unit_cost(0.0)
    ('0.1293', '5.593', '1,234', '0')
    """
    if value is None or not math.isfinite(value) or not 0.0 < abs(value) < 1000.0:
        return money(value)
    return f"{value:.{max(2, 3 - math.floor(math.log10(abs(value))))}f}"


def per_year(value: float | None, currency: str) -> str:
    return money(value) if value is None or not math.isfinite(value) else f"{money(value)} {clean(currency)}/year"


def fixed(value: float | None, decimals: int = 2) -> str:
    """An index or a sigma level; '-' where there is none.

    >>> fixed(1.333), fixed(None), fixed(-0.001)
    ('1.33', '-', '0.00')
    """
    if value is None:
        return "-"
    return f"{value:.{decimals}f}".replace("-0.00", "0.00") if math.isfinite(value) else UNKNOWN


def percent(yield_: float | None, loss: float | None) -> str:
    """A yield in per cent, with enough digits for its loss to stay visible.

    >>> percent(0.995, 0.005), percent(0.9999966, 3.4e-6), percent(1.0, 1e-20), percent(1e-7, 1.0)
    ('99.50 %', '99.99966 %', '>99.9999999999 %', '1.0e-05 %')
    """
    if yield_ is None or loss is None or not (math.isfinite(yield_) and math.isfinite(loss)):
        return UNKNOWN
    if yield_ < 0.5:
        return share(yield_)
    if loss < _SMALLEST_SHOWN_LOSS:
        return ">99.9999999999 %"
    places = max(2, -math.floor(math.log10(loss * 100.0)) + 1)
    digits = f"{100 - Decimal(loss) * 100:.{places}f}"
    whole, _, decimals = digits.partition(".")
    return f"{whole}.{decimals.rstrip('0'):0<2} %"


def share(part: float | None) -> str:
    """A share in per cent.

    >>> share(0.4213), share(0.00012), share(0.0)
    ('42.13 %', '0.012 %', '0 %')
    """
    if part is None or not math.isfinite(part):
        return UNKNOWN
    return f"{part * 100:.2f} %" if abs(part) >= 0.01 else f"{number(part * 100)} %"


def ppm(loss: float | None) -> str:
    """Defective units per million for a loss."""
    return number(None if loss is None else loss * 1e6)


def nines(loss: float | None) -> str:
    if loss is None or not math.isfinite(loss):
        return UNKNOWN
    return "no loss" if loss <= 0.0 else fixed(nines_of(loss))


def yield_in_full(yield_: float | None, loss: float | None) -> str:
    """A yield as per cent, ppm and nines.

    >>> yield_in_full(0.995, 0.005)
    '99.50 % (5,000 ppm, 2.30 nines)'
    """
    if yield_ is None or loss is None:
        return UNKNOWN
    return f"{percent(yield_, loss)} ({ppm(loss)} ppm, {nines(loss)} nines)"


def yield_name(name: str) -> str:
    return name.replace("_", " ")


def targets_in_full(targets: dict[str, float], losses: dict[str, float], first: str) -> str:
    """The targets in words, the split yield first."""
    names: Iterable[str] = sorted(targets, key=lambda name: (name != first, name))
    texts = [f"a {yield_name(name)} of {yield_in_full(targets[name], losses[name])}" for name in names]
    return " and ".join(texts)


PLAINLY = {
    "one price for all steps": "every step set to the same price of a defect",
    "interior point": "all levels searched together (an interior-point method)",
    "plain evaluation": "worked out as it is, since no level can move",
    "every step at its best": "every step set as good as it gets",
    "cutting planes and branch and bound": "a search that proves what it leaves out (branch and bound)",
}
"""Names that the solvers give to their methods, for people who never met them."""


def found_by(method: str) -> str:
    """How a plan was found, in plain words.

    >>> found_by("all 2 choices, each by one price for all steps")
    'all 2 choices of equipment tried; in each, every step set to the same price of a defect'
    """
    choices = re.match(r"all ([\d,]+) choices, each by (.*)", clean(method))
    how = choices[2] if choices else clean(method)
    for name, plain in PLAINLY.items():
        how = how.replace(name, plain)
    return f"all {choices[1]} choices of equipment tried; in each, {how}" if choices else how
