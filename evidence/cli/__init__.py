"""The command line: one file per command; everything beyond click is imported inside them."""

from evidence.cli import files, many, stress, weigh  # each adds its command to main
from evidence.cli.program import main

__all__ = ["files", "main", "many", "stress", "weigh"]
