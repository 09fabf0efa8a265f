"""Random capabilities in every form of the format, near a wanted defect probability."""

from __future__ import annotations

import math
import random

from tests.reference.states import State
from tests.reference.tails import z_for

FORMS = (
    "sigma_level", "cp", "cp cpk", "limits", "one limit", "cpk", "pp ppk", "ppk",
    "yield", "defect_rate", "dpmo", "item_yield", "ppm", "bad", "none bad",
)  # fmt: skip


def _round(value: float, digits: int = 5) -> float:
    return float(f"{value:.{digits}g}")


def today(rng: random.Random, p: float, opportunities: int, default_shift: float) -> dict:
    """The capability of a step as it runs today, with a probability near p per opportunity."""
    form = rng.choice(FORMS)
    told: dict = {}
    shift = default_shift
    if "ppk" not in form and rng.random() < 0.35:
        told["shift"] = shift = rng.choice([0.0, 0.5, 1.5])
    k = _round(rng.uniform(0.02, 0.3), 2) if rng.random() < 0.5 else 0.0
    if form in ("sigma_level", "cp"):
        if k:
            told["k"] = k
        if form == "sigma_level" and rng.random() < 0.3:
            told["sides"] = 1
        z = _round(z_for(p, k, shift, told.get("sides", 2)))
        return {"sigma_level": z} | told if form == "sigma_level" else {"cp": _round(z / 3)} | told
    if form in ("cp cpk", "pp ppk"):
        whole, near = form.split()
        cp = _round(z_for(p, k, 0.0 if near == "ppk" else shift, 2) / 3)
        return {whole: cp, near: _round(cp * (1 - k), 7)} | told
    if form in ("limits", "one limit"):
        return _limits(rng, form, p, k, shift) | told
    near_level = z_for(p, 0.0, 0.0 if form == "ppk" else shift, 1)
    if form in ("cpk", "ppk") and near_level > 0.1:
        return {form: _round(near_level / 3)} | told
    if form in ("cpk", "ppk"):
        form = "yield"
    if rng.random() < 0.3:
        told["sides"] = 2
        if k:
            told["k"] = k
    return _counted(rng, form, p, opportunities) | told


def _limits(rng: random.Random, form: str, p: float, k: float, shift: float) -> dict:
    std, middle = _round(rng.uniform(0.01, 2), 3), _round(rng.uniform(5, 50), 3)
    if form == "one limit":
        width = _round(z_for(p, 0.0, shift, 1) * std)
        return {rng.choice(["usl"]): middle + width, "mean": middle, "std": std}
    width = _round(z_for(p, k, shift, 2) * std)
    mean = middle + rng.choice([-1, 1]) * k * width
    return {"lsl": middle - width, "usl": middle + width, "mean": mean, "std": std}


def _counted(rng: random.Random, form: str, p: float, opportunities: int) -> dict:
    item = -math.expm1(opportunities * math.log1p(-p))
    if form == "none bad":
        return {"bad": 0, "of": max(20, round(math.log(2) / item))}
    if form == "bad":
        sample = rng.choice([2000, 10000])
        return {"bad": max(1, round(item * sample)), "of": sample}
    values = {
        "yield": 1 - p, "defect_rate": _round(p), "dpmo": _round(p * 1e6),
        "item_yield": 1 - item, "ppm": _round(item * 1e6),
    }  # fmt: skip
    return {form: values[form]}


def better(rng: random.Random, step: dict, state: State) -> dict:
    """A capability for an alternative: a lower defect probability, in a form that suits the step."""
    z = state.z * rng.uniform(1.04, 1.35) + 0.05
    forms = ["sigma_level", "cpk", "yield", "dpmo", "item_yield", "ppm"]
    if state.sides == 2:
        forms += ["cp", "cp cpk", "limits"]
    if "ppk" in step["capability"]:
        forms += ["ppk"]
    form = rng.choice(forms)
    if form == "sigma_level":
        return {"sigma_level": _round(z)}
    if form == "cp":
        return {"cp": _round(z / 3)}
    if form in ("cpk", "ppk"):
        return {form: _round(z * (1 - state.k) / 3)}
    if form == "cp cpk":
        k = state.k * rng.uniform(0.5, 1)
        cp = _round(z / 3)
        return {"cp": cp, "cpk": _round(cp * (1 - k), 7)}
    if form == "limits":
        k = state.k * rng.uniform(0.5, 1)
        return {"lsl": -_round(z), "usl": _round(z), "mean": k * _round(z), "std": 1.0}
    p = state.p(z)
    item = -math.expm1(state.n * math.log1p(-p))
    values = {"yield": 1 - p, "dpmo": _round(p * 1e6), "item_yield": 1 - item, "ppm": _round(item * 1e6)}
    return {form: values[form]}
