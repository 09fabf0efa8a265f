"""What is asked of suppliers: the buyer's table, and one sheet per supplier that can be handed over alone."""

from __future__ import annotations

from dataclasses import dataclass

from allocator.report import blocks, words
from allocator.report import sheets_text as st
from allocator.results import Sheet, SupplierSheet, SupplierSheets


@dataclass(frozen=True)
class OneSheet:
    """The sheet of one supplier."""

    supplier: str
    asked: list[list[str]]
    parts_heads: list[str]
    parts: list[tuple[str, list[tuple[str, str]]]]
    """By part, for each number of bad ones: parts at 90 % and at 95 %."""
    cpk_heads: list[str]
    cpk: list[list[str]]
    remarks: list[str]
    last_word: str


@dataclass(frozen=True)
class SheetsSaid:
    """All of them, and what they are worth to the buyer."""

    said: str
    worth: list[list[str]]
    notes: list[str]
    sheets: list[OneSheet]
    parts_note: str
    cpk_note: str
    rules: list[str]


def sheets_said(sheets: SupplierSheets | None) -> SheetsSaid | None:
    """The sheets of a review that names suppliers; None where it names none, or no plan keeps the promise."""
    if sheets is None or not sheets.rows:
        return None
    suppliers = sheets.suppliers
    count = "One supplier has" if len(suppliers) == 1 else f"{len(suppliers):,} suppliers have"
    return SheetsSaid(
        said=f"{count} a target sheet at the end of this page. What follows here is for the buyer alone.",
        worth=[[words.clean(row.supplier), *st.worth_row(row)] for row in sheets.rows],
        notes=[st.WORTH, *st.no_price(sheets.rows)],
        sheets=[_sheet(supplier) for supplier in suppliers],
        parts_note=st.PARTS,
        cpk_note=st.CPK,
        rules=[st.COUNT_RULE, st.NO_LICENCE],
    )


def _sheet(supplier: SupplierSheet) -> OneSheet:
    rows = supplier.rows
    counted = [words.quoted(row.step) for row in rows if row.counted]
    safety = [words.quoted(row.step) for row in rows if row.safety]
    return OneSheet(
        supplier=words.clean(supplier.supplier),
        asked=[_asked(row) for row in rows],
        parts_heads=[f"{st.BAD[bad]} bad" for bad, _, _ in rows[0].parts_with_bad],
        parts=[(words.clean(row.step), _parts(row)) for row in rows],
        cpk_heads=[f"on {parts} parts" for parts, _ in rows[0].observed_cpk_needed],
        cpk=[[words.clean(row.step), *st.cpk_row(row)[1:]] for row in rows],
        remarks=[
            *(said for row in rows for said in st.remarks(row)),
            *([st.COUNTED.format(steps=words.listed(counted))] if counted else []),
        ],
        last_word=blocks.SAFETY_WORD.format(steps=words.listed(safety)) if safety else blocks.LAST_WORD,
    )


def _parts(row: Sheet) -> list[tuple[str, str]]:
    return [(words.count(at_90), words.count(at_95)) for _, at_90, at_95 in row.parts_with_bad]


def _asked(row: Sheet) -> list[str]:
    return [
        words.clean(row.step), words.number(row.items_per_year), words.number(row.today.ppm),
        words.number(row.target.ppm), words.fixed(row.target.sigma_level), words.count(row.target.shift),
        words.fixed(row.target.cpk),
    ]  # fmt: skip
