"""The commands: each parses its arguments, makes one call and renders the answer."""

from allocator.cli import line, measure, money
from allocator.cli.app import app, main

__all__ = ["app", "line", "main", "measure", "money"]
