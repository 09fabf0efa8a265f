"""What is wrong with how a command was called, in the form of every other fault: the library's errors, put plainly."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from typing import Any

from allocator.cli.app import COMMAND_LINE
from allocator.errors import Fault
from allocator.scenario.faults import hint

WHOLE = ("points", "units", "seed")
"""Options that take a whole number; all others that take a figure take any number."""


def misuse(error: Any, typed: Sequence[str], commands: dict[str, Any]) -> Fault:
    """Return what was wrong with a call.

    Parameters
    ----------
    error : UsageError
    typed : sequence of str
        The arguments as typed.
    commands : dict
        The commands by name.
    """
    name = next((word for word in typed if word in commands), None)
    where = f"{COMMAND_LINE}, {name}" if name else COMMAND_LINE
    ask = f"see `allocator {name} --help`" if name else "see `allocator --help`"
    kind = type(error).__name__
    if kind == "NoSuchOption":
        allowed = _nearest(error.option_name, _options(commands, name), ask)
        return Fault(where, "", f"the option {error.option_name}", allowed)
    if kind == "MissingParameter":
        wanted = error.param.metavar or error.param.name
        return Fault(where, "", f"no {wanted}", f"give it: {_first_small(error.param.help or wanted)} ({ask})")
    if kind == "BadParameter":
        found = _value_of(error.param.opts, typed)
        return Fault(where, max(error.param.opts, key=len), found, _value_allowed(error.param.name))
    if kind == "BadOptionUsage":
        return _with_or_without(where, error.option_name, error.message)
    return _of_another_kind(where, error.message, ask) if name else _no_command(typed[0], commands)


def _no_command(typed: str, commands: Iterable[str]) -> Fault:
    allowed = _nearest(typed, commands, f"the commands are {', '.join(commands)}")
    return Fault(COMMAND_LINE, "", f"the command '{typed}'", allowed)


def _of_another_kind(where: str, message: str, ask: str) -> Fault:
    extra = re.search(r"extra arguments?\S* \((.*)\)", message)
    if extra is None:
        return Fault(where, "", f"what it cannot read ({message})", ask)
    allowed = f"leave it out, and put names with spaces in quotes ({ask})"
    return Fault(where, "", f"'{extra[1]}' beside what it takes", allowed)


def _nearest(found: str, known: Iterable[str], otherwise: str) -> str:
    near = hint(found, known)
    question = f"did you mean '{near}'?" if near else "there is none of that name;"
    return f"{question} {otherwise}"


def _options(commands: dict[str, Any], name: str | None) -> list[str]:
    return [option for param in commands[name].params for option in param.opts] if name else ["--version", "--help"]


def _value_of(options: Sequence[str], typed: Sequence[str]) -> str:
    for word, following in zip(typed, [*typed[1:], ""], strict=True):
        option, given, value = word.partition("=")
        if option in options:
            return f"'{value if given else following}'"
    return "what it cannot take"


def _value_allowed(name: str) -> str:
    if name == "of":
        return "give final, rolled or shipped"
    return "give a whole number, as 12" if name in WHOLE else "give a number, as 2.5"


def _with_or_without(where: str, option: str, message: str) -> Fault:
    if "does not take" in message:
        return Fault(where, option, "a value", "it takes none: leave the value out")
    return Fault(where, option, "nothing after it", "give its value, with a space or = between")


def _first_small(text: str) -> str:
    return text[:1].lower() + text[1:].rstrip(".")
