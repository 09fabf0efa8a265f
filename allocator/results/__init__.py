"""What the commands answer with: plain frozen records, numbers only; they neither print nor plot.

`rows` are the records of a result's own table; its namesake (`plan.steps`, `nines.points`) is the same as a DataFrame,
made when it is first asked for.
"""

from allocator.results.capital import Asset, Capacity, CapitalCase, CashCase, CashYear, Lever, Savings, ScrapView
from allocator.results.compare import Compared, Comparison, StepAcross, TakenAcross
from allocator.results.confidence import Confidence, StudyWorth, Trial
from allocator.results.line import Caution, Level, Money, TodayLine, Yields
from allocator.results.nines import Nines, NinesPoint
from allocator.results.option_table import LineFigures, Review, ReviewedStep, ReviewRow
from allocator.results.page import (
    Carried,
    Division,
    LeftOut,
    LinePart,
    ReviewPage,
    Row,
    RowAt,
    Share,
    Sources,
    Stated,
    Stop,
)
from allocator.results.plan import (
    BestReachable,
    Binding,
    Bought,
    LeastNeeded,
    Plan,
    Proof,
    Restraint,
    RuleOutcome,
    StepTarget,
)
from allocator.results.rehearsal import Rehearsal, Rehearsed, StepRehearsed
from allocator.results.sheets import Sheet, SupplierSheet, SupplierSheets
from allocator.results.study import Fit, Index, Indices, Outlier, Signal, Study
from allocator.results.table import as_table, records
from allocator.results.today import Check, StepToday, Today, Understood
from allocator.results.weigh import BreakEvenLevel, Weighed, Weighing

__all__ = [
    "Asset",
    "BestReachable",
    "Binding",
    "Bought",
    "BreakEvenLevel",
    "Capacity",
    "CapitalCase",
    "Carried",
    "CashCase",
    "CashYear",
    "Caution",
    "Check",
    "Compared",
    "Comparison",
    "Confidence",
    "Division",
    "Fit",
    "Index",
    "Indices",
    "LeastNeeded",
    "LeftOut",
    "Level",
    "Lever",
    "LineFigures",
    "LinePart",
    "Money",
    "Nines",
    "NinesPoint",
    "Outlier",
    "Plan",
    "Proof",
    "Rehearsal",
    "Rehearsed",
    "Restraint",
    "Review",
    "ReviewPage",
    "ReviewRow",
    "ReviewedStep",
    "Row",
    "RowAt",
    "RuleOutcome",
    "Savings",
    "ScrapView",
    "Share",
    "Sheet",
    "Signal",
    "Sources",
    "Stated",
    "StepAcross",
    "StepRehearsed",
    "StepTarget",
    "StepToday",
    "Stop",
    "Study",
    "StudyWorth",
    "SupplierSheet",
    "SupplierSheets",
    "TakenAcross",
    "Today",
    "TodayLine",
    "Trial",
    "Understood",
    "Weighed",
    "Weighing",
    "Yields",
    "as_table",
    "records",
]
