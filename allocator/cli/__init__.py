"""The commands: each parses its arguments, makes one call and renders the answer."""

from allocator.cli import certainty, line, measure, money, report
from allocator.cli.app import app, main

__all__ = ["app", "certainty", "line", "main", "measure", "money", "report"]
