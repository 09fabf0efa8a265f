"""Does the plan hold when it is played through: the line at work unit by unit, beside what was worked out."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from allocator.cautions import cautions_of_input, what_is_assumed
from allocator.cautions.clusters import CLUSTERED, cautions_of_clusters
from allocator.clustering import clustered_yield, rolled_yield
from allocator.draws import Behind, draw_levels
from allocator.errors import OutOfReachError, RangeError
from allocator.flow import Flow, Line, money, scrap_lost_at, yields
from allocator.played import Played, play
from allocator.problem import Problem, pose
from allocator.results import Caution, Money, Rehearsal, Rehearsed, StepRehearsed
from allocator.scenario.levels import column
from allocator.scenario.model import Capability, Scenario
from allocator.shopfloor import Shop
from allocator.solve.road import solve
from allocator.standing import flow_today, shipped_known
from allocator.states import States

Array = NDArray[np.float64]
UNITS, UNITS_UNCERTAIN = 1_000_000, 10_000_000
LEAST_UNITS, MOST_UNITS = 1_000, 100_000_000
HOPELESS = 100.0
"""A line that starts more items than this for one that is shipped is not played through: it would take for ever."""


@dataclass(frozen=True)
class AtHand:
    """The line that is rehearsed: its states, the levels planned, its flow and money as worked out."""

    states: States
    z: Array
    flow: Flow
    money: Money
    behind: Behind


def rehearse(
    scenario: Scenario,
    *,
    units: int | None = None,
    seed: int = 1,
    uncertain: bool = False,
    today: bool = False,
    watch: Callable[[int, int], None] | None = None,
) -> Rehearsal:
    """Return what a simulation of the plan counts, unit by unit, beside the computed figures.

    Parameters
    ----------
    scenario : Scenario
        As read by `read_scenario`.
    units : int, optional
        Units to ship in all, 1,000 to 100,000,000; 1,000,000 unless given, with `uncertain` 10,000,000.
    seed : int
        The same seed gives the same rehearsal.
    uncertain : bool
        Draw the capabilities too, for steps with a `sample`: many lines instead of many units of one line.
    today : bool
        Rehearse the line as it stands instead of the plan.
    watch : callable, optional
        Told how many batches of how many are done.

    Returns
    -------
    Rehearsal
        95 % intervals: Jeffreys' for yields, Student's t over batches for money and starts (Jeffreys' for fewer than
        30 events); with `uncertain` the middle 95 % of 200 lines drawn.

    Raises
    ------
    OutOfReachError
        When there is no plan that meets the target, or the line ships next to nothing of what it starts.
    RangeError
        When there are too few units to say anything.
    """
    units = units if units is not None else UNITS_UNCERTAIN if uncertain else UNITS
    if not LEAST_UNITS <= units <= MOST_UNITS:
        raise RangeError(_unfit(units))
    if seed < 0:
        raise RangeError(f"a seed is a whole number, 0 or more, not {seed}")
    problem = pose(scenario)
    hand = _today(problem) if today else _plan(problem)
    most = float(np.exp(np.minimum(np.max(hand.flow.exponent), 700.0)))
    if most > HOPELESS:
        many = f"{most:,.0f}" if most < 1e6 else "more than a million"
        raise OutOfReachError(
            f"this line starts {many} items for one that is shipped, too many to play through; rehearse a plan, "
            "or bring the worst steps into order first"
        )
    rng = np.random.default_rng(seed)
    shop = _shop(problem, hand, hand.flow.intensity)
    played = play(
        shop, (lambda chance: _redrawn(problem, hand, shop, chance)) if uncertain else None, units, rng, watch
    )
    return _compared(problem, hand, played, seed, "today" if today else "plan")


def _unfit(units: int) -> str:
    if units < LEAST_UNITS:
        return f"{units:,} units are too few to rehearse; give {LEAST_UNITS:,} or more"
    return (
        f"{units:,} units are too many to rehearse: every one is followed, which for {MOST_UNITS:,} takes minutes, and "
        f"ten times the units narrow the intervals only threefold; give {MOST_UNITS:,} or fewer"
    )


def _today(problem: Problem) -> AtHand:
    states, flow = problem.options.today, flow_today(problem)
    with np.errstate(over="ignore"):
        worked_out = money(problem.line, flow, 0.0)
    behind = _behind([step.capability for step in problem.scenario.step], np.zeros(len(states), dtype=bool))
    return AtHand(states, states.levels.sigma_level, flow, worked_out, behind)


def _plan(problem: Problem) -> AtHand:
    solved = None if problem.options.no_way else solve(problem)
    if solved is None or solved.outcome is None:
        raise OutOfReachError(
            "the target cannot be met, so there is no plan to rehearse; `allocator plan` says what binds, "
            "`--today` rehearses the line as it stands"
        )
    outcome, ways = solved.outcome, solved.problem.options.ways
    behind, centred = [], []
    for step, names in zip(problem.scenario.step, ways.text.take(outcome.choice.rows).alternatives(), strict=True):
        taken = [a for a in step.alternative if a.name in names]
        behind.append(next((a.capability for a in taken if a.capability is not None), step.capability))
        centred.append(any(a.k is not None for a in taken))
    states = ways.states.take(outcome.choice.rows)
    return AtHand(states, outcome.choice.z, outcome.flow, outcome.money, _behind(behind, np.array(centred)))


def _behind(capabilities: list[Capability], centred: NDArray[np.bool_]) -> Behind:
    of, sample = column(capabilities, "of"), column(capabilities, "sample")
    return Behind(np.where(np.isnan(of), sample, of), column(capabilities, "bad"), centred)


def _shop(problem: Problem, hand: AtHand, intensity: Array) -> Shop:
    """Return the line as the shop floor sees it: the tree, the defects and the gates, and nothing worked out."""
    line, gates = problem.line, hand.flow.gates
    alpha = column(problem.scenario.step, "clustering")
    return Shop(
        feeds=line.feeds,
        per_unit=line.per_unit,
        intensity=intensity,
        clustering=np.where(np.isnan(alpha), np.inf, alpha),
        finds=gates.finds,
        earlier=gates.earlier,
        falsely_lost=gates.rejects * gates.lost,
        mended=gates.reworked,
    )


def _redrawn(problem: Problem, hand: AtHand, shop: Shop, rng: np.random.Generator) -> Shop:
    return replace(shop, intensity=draw_levels(rng, hand.states, hand.z, hand.behind).intensity())


def _compared(problem: Problem, hand: AtHand, played: Played, seed: int, line: str) -> Rehearsal:
    scenario, shop, charges = problem.scenario, played.shop, Charges(problem.line, hand, played)
    losses, costs, rows = _losses(problem, hand, played), charges.as_planned(), _steps(problem, hand, played)
    poisson, clustered = (
        rolled_yield(shop.intensity, alpha, problem.line.per_finished) for alpha in (np.inf, shop.clustering)
    )
    return Rehearsal(
        title=scenario.title,
        currency=scenario.currency,
        shipped_per_year=problem.line.shipped,
        line=line,
        units=int(played.sizes.sum()),
        seed=seed,
        uncertain=played.uncertain,
        items_made=float(played.events("started").sum()),
        losses=losses,
        money=costs,
        every_item=charges.on_every_item(),
        difference=charges.difference(),
        poisson_rolled_yield=poisson,
        clustered_rolled_yield=clustered,
        rows=rows,
        missed=tuple(name for name, figure in {**losses, **costs}.items() if figure.holds is False),
        assumed=what_is_assumed(problem),
        cautions=_cautions(problem, shop.intensity),
    )


def _cautions(problem: Problem, intensity: Array) -> tuple[Caution, ...]:
    """Return the scenario's cautions, that of clusters for the line rehearsed instead of today's."""
    others = (caution for caution in cautions_of_input(problem) if caution.code != CLUSTERED)
    return (*cautions_of_clusters(problem, intensity), *others)


def _losses(problem: Problem, hand: AtHand, played: Played) -> dict[str, Rehearsed]:
    worked_out = yields(problem.line, hand.flow, shipped_known(problem, hand.states))
    losses = {
        "rolled_yield": played.loss(worked_out.rolled_loss, "spotless", "units"),
        "final_yield": played.loss(worked_out.final_loss, "good", "units"),
    }
    if worked_out.shipped_loss is not None:
        losses["shipped_yield"] = played.loss(worked_out.shipped_loss, "good", "came_out")
    return losses


class Charges:
    """What the counts cost a year: charged as the plan does, and on every item met; arrays of shape (n_batches,)."""

    def __init__(self, line: Line, hand: AtHand, played: Played):
        gates, q, year = hand.flow.gates, line.per_finished, line.shipped
        self.played, self.plan = played, hand.money
        self.lost, self.mended = int(played.events("lost").sum()), int(played.events("mended").sum())
        self.escaped = sum(batch.escaped for batch in played.shipped)
        self.scrap = year * (played.per_unit("lost") @ line.lost)
        self.rework = year * (played.mended_per_good() @ (q * gates.rework_cost))
        self.escapes = year * line.escape_cost * np.array([batch.escaped / batch.units for batch in played.shipped])
        self.inspection = year * float(q @ gates.per_item)
        self.rework_met = year * (played.per_unit("mended") @ gates.rework_cost)
        self.inspection_met = year * (played.per_unit("started") @ gates.per_item)
        # The most that one event of each kind adds; a unit lost at the end takes the work of all its items along.
        each = year / float(played.sizes.sum())
        self.dearest = {
            "scrap": each * float(line.lost.max()),
            "rework": each * float((q * gates.rework_cost).max()),
            "escapes": each * line.escape_cost,
            "added": each * float(q @ (gates.per_item + gates.rework_cost)),
        }

    def as_planned(self) -> dict[str, Rehearsed]:
        """Return the cost per year by kind and in all, charged as the plan does."""
        play, plan, dearest = self.played, self.plan, self.dearest
        bought = plan.improvement
        return {
            "scrap": play.figure(self.scrap, plan.scrap, self.lost, 0.0, dearest["scrap"]),
            "rework": play.figure(self.rework, plan.rework, self.mended, 0.0, dearest["rework"]),
            "escapes": play.figure(self.escapes, plan.escapes, self.escaped, 0.0, dearest["escapes"]),
            "inspection": Rehearsed(plan.inspection, self.inspection, self.inspection, self.inspection),
            "improvement": Rehearsed(bought, bought, bought, bought),
            "total": self._total(self.scrap + self.rework + self.escapes, plan.total),
        }

    def on_every_item(self) -> dict[str, Rehearsed]:
        """Return inspection, rework and the total, charged on every item met."""
        play, dearest = self.played, self.dearest
        return {
            "inspection": play.figure(self.inspection_met, None, self.lost, self.inspection, dearest["added"]),
            "rework": play.figure(self.rework_met, None, self.mended, 0.0, dearest["rework"]),
            "total": self._total(self.scrap + self.rework + self.escapes + self._added, None),
        }

    def difference(self) -> Rehearsed:
        """Return what charging every item met adds."""
        return self.played.figure(self._added, None, self.lost, 0.0, self.dearest["added"])

    @property
    def _added(self) -> Array:
        return self.inspection_met - self.inspection + self.rework_met - self.rework

    def _total(self, by_chance: Array, computed: float | None) -> Rehearsed:
        certain, events = self.inspection + self.plan.improvement, self.lost + self.mended + self.escaped
        most = max(self.dearest[kind] for kind in ("scrap", "rework", "escapes"))
        return self.played.figure(by_chance + certain, computed, events, certain, most)


def _steps(problem: Problem, hand: AtHand, played: Played) -> tuple[StepRehearsed, ...]:
    line, flow, shop = problem.line, hand.flow, played.shop
    year, units = line.shipped, float(played.sizes.sum())
    started, lost, events = played.per_unit("started"), played.per_unit("lost"), played.events("lost")
    starts, scrap = year * line.per_finished * np.exp(flow.exponent), scrap_lost_at(line, flow)
    later = line.tree.sums_to_end(events.astype(float))
    poisson, clustered = clustered_yield(shop.intensity, np.inf), clustered_yield(shop.intensity, shop.clustering)
    drawn = ~np.isnan(hand.behind.sample) & played.uncertain
    rows = []
    for i, step in enumerate(problem.scenario.step):
        item, w = year * float(line.per_finished[i]), year * float(line.lost[i])
        rows.append(
            StepRehearsed(
                step=step.name,
                starts_per_year=played.figure(
                    year * started[:, i], float(starts[i]), int(later[i]), item, item / units
                ),
                scrap=played.figure(w * lost[:, i], float(scrap[i]), int(events[i]), 0.0, w / units),
                clustering=step.clustering,
                poisson_item_yield=float(poisson[i]),
                clustered_item_yield=float(clustered[i]),
                drawn=bool(drawn[i]),
            )
        )
    return tuple(rows)
