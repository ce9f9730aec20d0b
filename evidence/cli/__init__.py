"""The command line: one file per command; everything beyond click is imported inside them."""

from evidence.cli import files, many, rehearse, stress, weigh  # each adds its command to main
from evidence.cli.program import main

__all__ = ["files", "main", "many", "rehearse", "stress", "weigh"]
