"""The command line: words in, words out."""

from intplan.cli.app import main, run

__all__ = ["main", "run"]
