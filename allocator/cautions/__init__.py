"""What is sound but risky, in the input and in the answer: each caution with its reason and its fix."""

from __future__ import annotations

from allocator.cautions.answer import cautions_of_held, cautions_of_plan
from allocator.cautions.assumed import what_is_assumed
from allocator.cautions.input import cautions_of_input

__all__ = ["cautions_of_held", "cautions_of_input", "cautions_of_plan", "what_is_assumed"]
