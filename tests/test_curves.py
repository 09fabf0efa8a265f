"""Cost and defect intensity of a way: inverses, slopes against high precision, and where the laws are convex."""

from __future__ import annotations

import math
from itertools import pairwise
from typing import Any

import mpmath as mp
import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from strategies import Drawn, copies, curve, levels, quick

from allocator import curves as cv
from allocator.curves import Curves
from allocator.stretch import CHORDS, convex_stretches

BACK = 1e-9
"""z from δ: δ has 16 digits, and where p nears 1 (hopeless, two-sided) z hangs on the last of them."""
SLOPES = 1e-8
"""Analytic slopes against 40-digit differences; the second slope is a difference of two large terms."""
FLAT = 1e-9
"""A curvature below this share of C'/δ is rounding."""

LAWS = [(cv.POWER, 0.3), (cv.POWER, 1.0), (cv.POWER, 2.5), (cv.EXPONENTIAL, 0.2), (cv.EXPONENTIAL, 2.0), (cv.DECADE, 0)]
STATES: list[dict[str, Any]] = [
    {"start": 3.0, "z": 3.7},
    {"start": 4.0, "z": 5.5, "shift": 1.5, "k": 0.1, "opportunities": 40.0},
    {"start": 2.0, "z": 2.2, "sides": 1, "shift": 0.5},
    {"start": 1.8, "z": 2.6, "sides": 1, "installed": 3, "needed": 2, "common_cause": 0.05, "opportunities": 4.0},
    {"start": 2.5, "z": 3.0, "installed": 2, "needed": 1},
]


def precise_intensity(row: Curves, z: Any) -> Any:
    """δ(z) by the formulas of the model, to the working precision of mpmath."""
    k, s, n = (mp.mpf(float(x[0])) for x in (row.k, row.shift, row.opportunities))
    p = mp.ncdf(s - z * (1 - k)) + (mp.ncdf(-(z * (1 + k) + s)) if row.sides[0] == 2 else 0)
    if row.installed[0] > 1:
        copies_, needed, beta = int(row.installed[0]), int(row.needed[0]), mp.mpf(float(row.common_cause[0]))
        bad = (1 - beta) * p
        counts = range(needed, copies_ + 1)
        enough = mp.fsum(mp.binomial(copies_, g) * (1 - bad) ** g * bad ** (copies_ - g) for g in counts)
        p = 1 - (1 - beta * p) * enough
    return -n * mp.log(1 - p)


def precise_cost(row: Curves, z: Any) -> Any:
    start, a = mp.mpf(float(row.start[0])), mp.mpf(float(row.parameter[0]))
    if row.kind[0] == cv.POWER:
        return (z / start) ** a - 1
    if row.kind[0] == cv.EXPONENTIAL:
        return mp.exp(a * (z - start)) - 1
    n = mp.mpf(float(row.opportunities[0]))
    bad = [1 - mp.exp(-precise_intensity(row, level) / n) for level in (start, z)]
    return mp.log10(bad[0] / bad[1])


@quick(80)
@given(levels(), st.sampled_from([1.0, 7.0, 400.0]))
def test_sigma_is_the_inverse_of_intensity(level: Drawn, opportunities: float) -> None:
    z = level.pop("z")
    row = curve(opportunities=opportunities, **level)
    delta = cv.intensity(row, np.array([z]))
    assume(delta[0] < 5.0 * opportunities)  # beyond, nearly every opportunity fails and p has lost the digits of z
    assert cv.sigma(row, delta)[0] == pytest.approx(z, rel=BACK)


@quick(80)
@given(levels(), copies())
def test_sigma_is_the_inverse_of_intensity_with_copies(level: Drawn, set_of: Drawn) -> None:
    z = level.pop("z")
    row = curve(**level, **set_of)
    delta = cv.intensity(row, np.array([z]))
    assume(1e-290 < delta[0] < 5.0)
    assert cv.sigma(row, delta)[0] == pytest.approx(z, rel=BACK)


@pytest.mark.parametrize(("kind", "parameter"), LAWS)
@pytest.mark.parametrize("state", STATES, ids=range(len(STATES)))
def test_slopes_against_forty_digits(kind: int, parameter: float, state: dict[str, Any]) -> None:
    z = state["z"]
    row = curve(kind, parameter, scale=250.0, **{key: value for key, value in state.items() if key != "z"})
    delta = cv.intensity(row, np.array([z]))
    with mp.workdps(40):
        level = mp.mpf(z)

        def slope(x: Any) -> Any:
            return mp.diff(lambda y: precise_cost(row, y), x) / mp.diff(lambda y: precise_intensity(row, y), x)

        bend = mp.diff(slope, level, h=mp.mpf(10) ** -10) / mp.diff(lambda y: precise_intensity(row, y), level)
        want = [float(250 * value) for value in (precise_cost(row, level), slope(level), bend)]
        assert delta[0] == pytest.approx(float(precise_intensity(row, level)), rel=1e-12)
    assert [x[0] for x in cv.smooth_slopes(row, delta)] == pytest.approx(want, rel=SLOPES)
    assert cv.smooth_cost(row, np.array([z]))[0] == pytest.approx(want[0], rel=1e-11)


@pytest.mark.parametrize("state", STATES, ids=range(len(STATES)))
def test_intensity_slopes_against_forty_digits(state: dict[str, Any]) -> None:
    z, row = state["z"], curve(**{key: value for key, value in state.items() if key != "z"})
    with mp.workdps(40):
        want = [float(mp.diff(lambda y: precise_intensity(row, y), mp.mpf(z), order)) for order in range(3)]
    assert [x[0] for x in cv.intensity_slopes(row, np.array([z]))] == pytest.approx(want, rel=SLOPES)


def bend_of(row: Curves, z: np.ndarray) -> np.ndarray:
    """C''·δ/|C'|: the curvature on a scale on which 1 is the curvature of 1/δ or so."""
    many = row.take(np.zeros(len(z), dtype=int))
    delta = cv.intensity(many, z)
    _, slope, bend = cv.smooth_slopes(many, delta)
    return bend * delta / np.abs(slope)


@quick(120)
@given(levels(), st.sampled_from([law for law in LAWS if law != (cv.POWER, 0.3)]), st.floats(0.0, 5.0))
def test_these_laws_are_convex_past_the_drift(level: Drawn, law: tuple[int, float], above: float) -> None:
    """Exponential, decade and power with exponent ≥ 1, wherever z(1−k) ≥ s."""
    level.pop("z")
    z = level["shift"] / (1.0 - level["k"]) + above
    assume(z > 0.05)
    row = curve(*law, start=0.9 * z, opportunities=3.0, **level)
    assert bend_of(row, np.array([z]))[0] >= -FLAT


@quick(120)
@given(levels(), st.floats(0.05, 1.0), st.floats(1e-9, 0.2))
def test_a_gentle_power_law_is_convex_below_a_fifth_bad(level: Drawn, exponent: float, p: float) -> None:
    level.pop("z")
    row = curve(cv.POWER, exponent, start=0.1, **level)
    z = cv.sigma(row, np.array([-math.log1p(-p)]))
    assume(z[0] > 0.1)
    assert bend_of(row, z)[0] >= -FLAT


@pytest.mark.parametrize(("exponent", "limit"), [(0.1, 0.218), (0.3, 0.259)])
def test_where_a_gentle_power_law_stops_being_convex(exponent: float, limit: float) -> None:
    """The two limits that the model page states, for one centred item without drift and one limit."""
    row = curve(cv.POWER, exponent, start=0.1, sides=1)
    inside, outside = (cv.sigma(row, np.array([-math.log1p(-p)])) for p in (limit - 0.002, limit + 0.002))
    assert bend_of(row, inside)[0] > 0.0
    assert bend_of(row, outside)[0] < 0.0


NOT_CONVEX = [
    curve(cv.POWER, 0.2, start=0.3, sides=1),
    curve(cv.POWER, 0.5, start=0.3, sides=1, opportunities=5.0),
    curve(cv.POWER, 0.2, start=0.3, shift=3.0, k=0.1),
    curve(cv.POWER, 0.2, start=0.3, installed=3, needed=2, common_cause=0.1, sides=1),
    curve(cv.POWER, 0.2, start=0.3, installed=4, needed=1, shift=3.0),
]


@pytest.mark.parametrize("row", NOT_CONVEX, ids=range(len(NOT_CONVEX)))
def test_a_law_that_is_not_convex_is_cut_into_pieces_that_are(row: Curves) -> None:
    low, high = float(row.start[0]), float(row.start[0]) + 4.0
    assert bend_of(row, np.linspace(low, high, 200)).min() < -1e-3, "the example must really bend the other way"
    pieces = convex_stretches(row, low, high)
    assert (pieces[0].low, pieces[-1].high) == (low, high)
    assert all(left.high == right.low for left, right in pairwise(pieces))
    assert sum(piece.lines is not None for piece in pieces) >= CHORDS
    for piece in pieces:
        z = np.linspace(piece.low, piece.high, 33)
        many = row.take(np.zeros(len(z), dtype=int))
        if piece.lines is None:
            assert bend_of(row, z).min() >= -1e-6  # the ends are roots of the curvature, found to 1e-13 in z
        else:
            chord = np.interp(cv.intensity(many, z), *piece.lines)
            cost = cv.smooth_cost(many, z)
            assert np.all(chord <= cost + 1e-12 * np.abs(cost).max())
            assert chord[[0, -1]] == pytest.approx(cost[[0, -1]], rel=1e-12)


@quick(60)
@given(levels(), st.sampled_from(LAWS), st.floats(0.05, 3.0))
def test_pieces_cover_the_range_and_never_lie_above_the_law(level: Drawn, law: tuple[int, float], width: float) -> None:
    z0 = level.pop("z")
    row = curve(*law, start=z0, **level)
    pieces = convex_stretches(row, z0, z0 + width)
    assert (pieces[0].low, pieces[-1].high) == (z0, z0 + width)
    assert all(left.high == right.low for left, right in pairwise(pieces))
    for piece in pieces:
        z = np.linspace(piece.low, piece.high, 9)
        many = row.take(np.zeros(len(z), dtype=int))
        if piece.lines is None:
            assert bend_of(row, z).min() >= -1e-6
        else:
            cost = cv.smooth_cost(many, z)
            assert np.all(np.interp(cv.intensity(many, z), *piece.lines) <= cost + 1e-12 * (1.0 + cost.max()))


def test_a_law_costs_nothing_at_its_start_and_a_decade_costs_its_scale() -> None:
    for law in LAWS:
        row = curve(*law, start=3.0, scale=70.0)
        assert cv.smooth_cost(row, np.array([3.0]))[0] == 0.0
    decade = curve(cv.DECADE, start=3.0, scale=70.0, opportunities=9.0)
    tenth = cv.sigma_from_probability(decade, cv.log_probability(decade, np.array([3.0])) - math.log(10.0))
    assert cv.smooth_cost(decade, tenth)[0] == pytest.approx(70.0, rel=1e-12)


def test_two_of_two_copies_fail_twice_as_often_and_one_of_two_as_the_square() -> None:
    alone = cv.intensity(curve(sides=1), np.array([3.0]))[0]
    p = -math.expm1(-alone)
    both = cv.intensity(curve(sides=1, installed=2, needed=2), np.array([3.0]))[0]
    either = cv.intensity(curve(sides=1, installed=2, needed=1), np.array([3.0]))[0]
    assert both == pytest.approx(2.0 * alone, rel=1e-12)
    assert -math.expm1(-either) == pytest.approx(p**2, rel=1e-12)
