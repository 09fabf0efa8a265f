"""What every key of a scenario means, in a sentence, and what a spreadsheet program may check while it is filled in."""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal

from allocator.scenario.model import LARGEST, MOST_COUNTED, YIELD_NAMES, Table, Target
from allocator.scenario.schema import Spec, spec

if TYPE_CHECKING:
    from openpyxl.worksheet.datavalidation import DataValidation

USUAL: dict[str, tuple[str, ...]] = {
    "scenario": ("title", "currency", "note"),
    "demand": ("shipped_per_year", "years", "discount_rate"),
    "target": ("final_yield", "shipped_yield.ppm", "escape_cost"),
    "limits": ("capital",),
    "default": (
        "shift", "inspection.finds", "inspection.earlier", "inspection.per_item", "rework.share", "rework.cost",
    ),
    "purchase": ("name", "price", "trade_in", "life_years", "resale", "per_year", "evidence"),
    "step": (
        "name", "supplier", "feeds", "cost_added", "salvage", "opportunities", "cp", "cpk", "dpmo", "ppm",
        "at_least.cpk", "improve.law", "improve.exponent", "improve.price", "improve.per_item", "improve.up_to",
        "evidence", "source",
    ),
    "alternative": (
        "name", "group", "uses", "price", "life_years", "resale", "per_year", "per_item", "cp",
        "dpmo", "k", "evidence", "source",
    ),
    "improve.points": ("dpmo", "price"),
}  # fmt: skip
"""Keys that a sheet shows even while nothing stands there."""

MEANINGS: dict[str, str] = {
    "title": "the product or the line",
    "currency": "the currency of all money here",
    "note": "anything worth remembering",
    "source": "where the figures of this row come from",
    "evidence": "how well the figures are known",
    "steps_from": "a CSV file or another workbook's sheet with more steps, as book.xlsx#steps",
    "alternatives_from": "a CSV file or another workbook's sheet with more alternatives",
    "shipped_per_year": "good units shipped per year",
    "years": "horizon: the life of what is bought, unless it states its own",
    "discount_rate": "yearly rate at which money is discounted, 0.08 for 8 %",
    "final_yield": "target: a unit started comes out, and comes out good",
    "rolled_yield": "target: no defect anywhere",
    "shipped_yield": "target: a unit that reaches the customer is good",
    "escape_cost": "money per defect that reaches the customer",
    "capital": "money that may be spent at once, at most",
    "shift": "drift allowance of the mean, in standard deviations",
    "finds": "share of the defects made in this step that its inspection finds",
    "earlier": "share of the hidden defects that came in which the inspection finds",
    "rejects_good": "share of good items rejected all the same",
    "rejects_lost": "share of these that is really lost",
    "share_inspected": "share of the items that is looked at",
    "share": "share of what is found bad that is reworked",
    "cost": "money per item reworked",
    "name": "its name, no two alike",
    "supplier": "who delivers it",
    "feeds": "the later step that the item goes into; empty: the next one",
    "per_unit": "items of this step in one item of the step that it feeds",
    "opportunities": "ways in which one item can go wrong",
    "clustering": "α, how loosely defects cluster on items (0.5 much, above 5 hardly); drawn in a rehearsal",
    "scrap_cost": "money lost when one item is scrapped here (instead of cost_added)",
    "cost_added": "money of material and work that this step adds to one item",
    "salvage": "money got back for an item scrapped here",
    "safety": "people can be hurt where this fails: needs a floor",
    "fixed": "no alternative and no law here",
    "group": "one alternative of a group is chosen, or none",
    "uses": "the shared purchase that it needs",
    "price": "money paid once",
    "trade_in": "money got for what is replaced",
    "life_years": "years over which it is counted",
    "resale": "money got for it at the end of its life",
    "per_year": "money per year",
    "per_item": "money per item",
    "price_low": "money paid once, if it turns out low",
    "price_high": "money paid once, if it turns out high",
    "per_year_low": "money per year, if it turns out low",
    "per_year_high": "money per year, if it turns out high",
    "per_item_low": "money per item, if it turns out low",
    "per_item_high": "money per item, if it turns out high",
    "price_allowance": "money per finished unit that the customer gets for it",
    "k": "offset of the mean from mid-spec over the half-width of the limits",
    "widen": "factor by which the limits grow",
    "installed": "items installed, of which some are needed",
    "needed": "items that must be good",
    "common_cause": "share of the failures that takes all copies at once",
    "law": "how the cost of improving rises",
    "exponent": "of a law `power`",
    "rate": "of a law `exponential`, per sigma level",
    "up_to": "the best sigma level that was shown or quoted",
    "sigma_level": "half-width of the limits over the standard deviation",
    "cp": "capability index, as if centred",
    "cpk": "capability index as measured on parts, without the drift allowance",
    "pp": "long-term index, drift inside",
    "ppk": "long-term index, drift inside",
    "lsl": "lower limit",
    "usl": "upper limit",
    "mean": "mean of the measurements",
    "std": "short-term standard deviation of the measurements",
    "yield": "good share per opportunity",
    "defect_rate": "bad share per opportunity",
    "dpmo": "defects per million opportunities",
    "item_yield": "good share of the items",
    "ppm": "bad items (as a target: units) per million",
    "nines": "target in nines: 3 is 0.999",
    "bad": "bad ones found",
    "of": "among so many",
    "per": "among so many",
    "data": "a CSV file of measurements beside this workbook",
    "column": "its column",
    "subgroup": "its column of subgroups, as shifts or batches",
    "sides": "number of limits",
    "sample": "parts behind the estimate",
}
ABOUT = {
    "capability": "capability today (of an alternative: with it)",
    "inspection": "inspection at the end of the step",
    "rework": "rework of what is found bad",
    "at_least": "floor that binds whatever money says",
    "improve": "law of improvement",
    "at": "level that costs exactly the stated price",
    "copies": "copies, so that one may fail",
    "final_yield": "target for the final yield",
    "rolled_yield": "target for the rolled yield",
    "shipped_yield": "target for the shipped yield",
}
OF_THE_STEP = "the step that the row belongs to, by its name"


def meaning(record: type[Table], path: tuple[str, ...]) -> str:
    """Return what a key means and what it takes."""
    if not path:
        return OF_THE_STEP
    about = [ABOUT[key] for key in path[:-1] if key in ABOUT]
    text = ": ".join((*about, MEANINGS[path[-1]]))
    takes = "a number below 1" if _is_yield(record, path) else spec(record, path).words
    return f"{text} ({takes})" if takes else text


def _is_yield(record: type[Table], path: tuple[str, ...]) -> bool:
    return record is Target and path[0] in YIELD_NAMES and len(path) == 1


def validation(record: type[Table], path: tuple[str, ...]) -> DataValidation | None:
    """Return what a spreadsheet program shall refuse at a key, None where every text is right."""
    from openpyxl.worksheet.datavalidation import DataValidation

    if record is Target and path[0] in YIELD_NAMES:
        rule = DataValidation(type="decimal", operator="greaterThan", formula1="0")
    else:
        here = spec(record, path)
        if here.choices:
            rule = DataValidation(type="list", formula1=f'"{",".join(here.choices)}"')
        elif here.kinds == ("boolean",):
            rule = DataValidation(type="list", formula1='"true,false"')
        elif {"number", "integer"} & set(here.kinds):
            rule = _number(here)
        else:
            return None
    rule.allow_blank, rule.showErrorMessage, rule.showInputMessage = True, True, True
    rule.errorTitle, rule.error = path[-1], meaning(record, path)[:220]
    return rule


def _number(here: Spec) -> DataValidation:
    from openpyxl.worksheet.datavalidation import DataValidation

    kind: Literal["whole", "decimal"] = "whole" if here.kinds == ("integer",) else "decimal"
    low = -LARGEST if here.lower is None else here.lower
    high = (MOST_COUNTED if kind == "whole" else LARGEST) if here.upper is None else here.upper
    return DataValidation(type=kind, operator="between", formula1=f"{low:g}", formula2=f"{high:g}")
