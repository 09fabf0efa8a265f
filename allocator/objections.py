"""What speaks against an option: what its figures assume, and who else must agree."""

from __future__ import annotations

from collections.abc import Iterator

from allocator.scenario.model import Alternative, Copies, Evidence, Inspection, Step

NO_EVIDENCE = "nothing is said of where its figures come from"
WIDENED = (
    "the product changes: it needs functional evidence, the design authority's approval and, where it is the "
    "customer's drawing, the customer's"
)
DESIGNED = "a design change: it must be verified anew, and every document that counts opportunities revised"
RECENTRED = "a setting, not a machine: somebody must hold it there"
STEADIED = "the smaller drift allowance must be shown over months, not in a short study"
REWORKED = "reworked items are taken as good, and as no dearer to handle than entered"
NEW_SOURCE = "a new source must be qualified first, and its figures shown on its parts"
NEW_MACHINE = "quoted capability is the maker's; it has to be shown at acceptance, on these parts"
OFF_CENTRE = "a better machine does not centre the process: k stays as it is"
LAW = "a curve, not a quotation: what improvement costs is taken from the law"
QUOTED_LAW = "priced between quotations; nothing is promised past the best of them"


def against_alternative(step: Step, own: Alternative, off_centre: bool) -> tuple[str, ...]:
    """Return what speaks against an alternative of a step (whose mean is off centre today, or not), in words."""
    return tuple(_of_alternative(step, own, off_centre))


def _of_alternative(step: Step, own: Alternative, off_centre: bool) -> Iterator[str]:
    if own.widen is not None:
        yield WIDENED
    if own.opportunities is not None:
        yield DESIGNED
    if own.capability is None and own.k is not None:
        yield RECENTRED
    if own.capability is None and own.shift is not None:
        yield STEADIED
    if own.inspection is not None:
        yield from _of_inspection(own.inspection)
    if own.rework is not None:
        yield REWORKED
    if own.copies is not None:
        yield _of_copies(own.copies)
    if own.capability is not None:
        yield NEW_SOURCE if step.supplier is not None else NEW_MACHINE
        if off_centre and own.k is None and own.capability.k is None:
            yield OFF_CENTRE
    if own.uses is not None:
        yield f"needs '{own.uses}', which is bought once for all that use it"
    yield from _of_evidence(own.evidence)


def _of_inspection(inspection: Inspection) -> Iterator[str]:
    if inspection.finds >= 1.0 and inspection.share_inspected >= 1.0:
        yield "taken to find every defect made here: no inspection does"
    else:
        yield f"finds {inspection.finds * inspection.share_inspected:.0%} of the defects made here: the rest goes on"
    if inspection.earlier > 0.0:
        yield "what several checks miss together is taken as independent"
    if inspection.rejects_good > 0.0:
        yield f"rejects {inspection.rejects_good:.2%} of good items, of which {inspection.rejects_lost:.0%} are lost"


def _of_copies(copies: Copies) -> str:
    if copies.common_cause == 0.0:
        return "no common cause is assumed: units alike, in one place, seldom fail independently"
    return f"common cause {copies.common_cause:g} is assumed; the gain ends there"


def _of_evidence(evidence: Evidence | None) -> Iterator[str]:
    if evidence is None:
        yield NO_EVIDENCE
    elif evidence == "judged":
        yield "its figures are judged, not measured or quoted"


def against_law(step: Step) -> tuple[str, ...]:
    """Return what speaks against improving a step by its law, in words."""
    law = step.improve
    assert law is not None
    return (QUOTED_LAW if law.law == "quotes" else LAW, *_of_evidence(law.evidence or step.evidence))
