"""Target sheets as text, one per supplier: what is asked, how it is shown and counted; apart, what it is worth."""

from __future__ import annotations

from collections.abc import Sequence

from allocator.report import blocks, words
from allocator.report.paper import LOG_WIDTH, Paper, columns
from allocator.results import Sheet, SupplierSheet, SupplierSheets

PARTS = "Parts that show the ppm: so many, with no more bad ones among them, demonstrate it at 90 and 95 %."
CPK = "Cpk to observe: what so many parts must show for the true Cpk to be at the target with 95 % confidence."
BAD = ("none", "one", "two")
COUNTED = "Counted, not measured: {steps}. The Cpk there is the equivalent of the ppm, of use only once it is measured."
COUNT_RULE = (
    "Count rule: a part is bad if anything agreed on is wrong with it, and counts once. A lot that is sorted counts "
    "the bad parts found. A year's ppm is all bad parts over all parts delivered, never the mean of monthly figures."
)
NO_LICENCE = (
    "A ppm target is no licence for defects: it makes no defective part acceptable, every bad part may be rejected "
    "whatever the count stands at, and nobody's legal duties change."
)
WORTH = (
    "One ppm less: what the buyer's year becomes cheaper by, all else at its best. Largest rise: what the price may "
    "rise by for the whole way from today to the target, in place of what the plan pays for it here. Refusal: what the "
    "year becomes dearer by if the part stays as it is today and everything else is planned anew."
)
NO_PRICE = (
    "One ppm less counts scrap, rework and escapes only: with nothing continuous to move, the target itself has no "
    "price here."
)


def sheets_text(answer: SupplierSheets, width: int = LOG_WIDTH) -> str:
    paper = Paper(width)
    blocks.write_title(paper, answer.title, answer.shipped_per_year)
    for supplier in answer.suppliers:
        _write_sheet(paper, supplier)
    _write_for_the_buyer(paper, answer)
    blocks.write_assumed(paper, answer.assumed)
    blocks.write_cautions(paper, answer.cautions)
    blocks.write_last_word(paper, [row.step for row in answer.rows if row.safety])
    return paper.text()


def _write_sheet(paper: Paper, supplier: SupplierSheet) -> None:
    rows = supplier.rows
    name = words.clean(supplier.supplier)
    paper.heading(f"Target sheet for {name}")
    paper.say("=" * min(len(f"Target sheet for {name}"), 60))
    heads = columns(
        ["part"], ["parts\na year", "ppm\ntoday", "ppm\ntarget", "dpmo\ntarget", "sigma\nlevel", "shift", "Cpk"]
    )
    paper.table(heads, (_target_row(row) for row in rows), len(rows))
    paper.bullets([said for row in rows for said in remarks(row)], most=3 * len(rows))
    paper.say(PARTS)
    shares = [f"{BAD[bad]} bad,\n{share} %" for bad, _, _ in rows[0].parts_with_bad for share in (90, 95)]
    paper.table(columns(["part"], shares), (_parts_row(row) for row in rows), len(rows))
    paper.say(CPK)
    heads = columns(["part"], ["target", *(f"observed on\n{n} parts" for n, _ in rows[0].observed_cpk_needed)])
    paper.table(heads, (cpk_row(row) for row in rows), len(rows))
    counted = [words.quoted(row.step) for row in rows if row.counted]
    if counted:
        paper.say(COUNTED.format(steps=words.listed(counted)))
    paper.say(COUNT_RULE)
    paper.say(NO_LICENCE)


def _target_row(row: Sheet) -> list[str]:
    target = row.target
    return [
        row.step, words.number(row.items_per_year), words.number(row.today.ppm), words.number(target.ppm),
        words.number(target.dpmo), words.fixed(target.sigma_level), words.count(target.shift), words.fixed(target.cpk),
    ]  # fmt: skip


def remarks(row: Sheet) -> list[str]:
    part, said = words.quoted(row.step), []
    if row.alternatives:
        taken = words.listed([words.quoted(name) for name in row.alternatives])
        said.append(f"{part}: the plan takes {taken} here; the target is for whoever delivers that.")
    if row.floor is not None:
        kind = "Safety floor" if row.safety else "Floor"
        said.append(f"{part}: {kind}: {words.clean(row.floor)}, whatever money says.")
    if not row.volume_allows:
        wanted = "more parts than can be counted" if row.parts_for_95 is None else f"{row.parts_for_95:,}"
        said.append(
            f"{part}: a year's {words.number(row.items_per_year)} parts cannot show this ppm at 95 % "
            f"(that takes {wanted}, none bad); agree on the Cpk instead."
        )
    return said


def _parts_row(row: Sheet) -> list[str]:
    return [row.step, *(words.count(parts) for _, *both in row.parts_with_bad for parts in both)]


def cpk_row(row: Sheet) -> list[str]:
    return [row.step, words.fixed(row.target.cpk), *(words.fixed(cpk) for _, cpk in row.observed_cpk_needed)]


def _write_for_the_buyer(paper: Paper, answer: SupplierSheets) -> None:
    money = words.clean(answer.currency)
    paper.heading(f"For the buyer alone: what it is worth (a year in {money}; prices in {money} per 1,000 parts)")
    heads = columns(
        ["part"],
        ["one ppm less,\na year", "one ppm less,\n1,000 parts", "largest rise,\n1,000 parts", "refusal,\na year"],
    )
    paper.table(heads, (worth_row(row) for row in answer.rows), len(answer.rows))
    paper.say(WORTH)
    paper.bullets(no_price(answer.rows), most=len(answer.rows) + 1)


def worth_row(row: Sheet) -> list[str]:
    rise = None if row.largest_price_rise is None else 1000.0 * row.largest_price_rise
    return [
        row.step, words.number(row.worth_per_ppm_year), words.number(1000.0 * row.worth_per_ppm_item),
        "-" if rise is None else words.money(rise),
        "no price" if row.cost_of_refusal is None else words.money(row.cost_of_refusal),
    ]  # fmt: skip


def no_price(rows: Sequence[Sheet]) -> list[str]:
    said = [
        f"A refusal at {words.quoted(row.step)} has no price: {words.clean(row.refusal_reason)}."
        for row in rows
        if row.refusal_reason
    ]
    return said if all(row.worth_has_target for row in rows) else [*said, NO_PRICE]
