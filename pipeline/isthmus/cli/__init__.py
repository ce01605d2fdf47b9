"""Words in, words out: the command `isthmus`."""

from isthmus.cli.main import exit_code, main

__all__ = ["exit_code", "main"]
