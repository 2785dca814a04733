"""What a user can get wrong, as exceptions that fit on one line and know their exit status."""

from __future__ import annotations

import difflib
from collections.abc import Iterable

LONGEST_COMPARED = 100


class IntplanError(Exception):
    """A failure that a user can cause and mend.

    Parameters
    ----------
    message : what is wrong, and the right word where there is one
    where : the place: a file, a table and key of a sheet, an argument
    """

    exit_status = 2

    def __init__(self, message: str, where: str | None = None) -> None:
        self.message = printable(message)
        self.where = None if where is None else printable(where)
        super().__init__(self.message, self.where)

    def __str__(self) -> str:
        return self.message if self.where is None else f"{self.where}: {self.message}"


class SheetError(IntplanError):
    """Something is wrong with a sheet."""


class PlanFileError(IntplanError):
    """Something is wrong with a plan table or a standing-plan file."""


def printable(text: str) -> str:
    r"""Return `text` safe to show on one line: what a terminal might act on becomes an escape.

    Control, format and separator characters and lone surrogates turn into ``\n``, ``\x1b``,
    ``\u202e`` and the like; letters, marks, digits, signs and plain spaces stay.
    """
    if text.isprintable():
        return text
    return "".join(
        c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in text
    )


def excerpt(text: str, longest: int = 40) -> str:
    """Return `text` for a message: printable, in quotes, cut with dots where it is long."""
    shown = text if len(text) <= longest else text[: longest - 3] + "..."
    return f'"{printable(shown)}"'


def nearest(word: str, known: Iterable[str]) -> str | None:
    """Return the known word that `word` was probably meant to be, or None."""
    if len(word) > LONGEST_COMPARED:
        return None
    known = list(known)
    folded = word.casefold()
    for candidate in known:
        if candidate.casefold() == folded:
            return candidate
    close = difflib.get_close_matches(word, known, n=1, cutoff=0.6)
    return close[0] if close else None


def unknown(kind: str, word: str, known: Iterable[str]) -> str:
    """Return a sentence that `word` is no known `kind`, with the nearest known one.

    A short list of known words is given whole where none of them is near.
    """
    known = list(known)
    sentence = f"unknown {kind} {excerpt(word)}"
    near = nearest(word, known)
    if near is not None:
        return f'{sentence}; did you mean "{near}"?'
    if 0 < len(known) <= 8:
        return f"{sentence}; known: {', '.join(known)}"
    return sentence
