"""What the program says: the answer on stdout, all else on stderr, one status line in place."""

from __future__ import annotations

import contextlib
import json
import os
import shutil
import sys
from collections.abc import Iterable
from typing import Any, TextIO

ERASE = "\r\x1b[K"


class OutputError(Exception):
    """Stdout does not take the answer, for another reason than that its reader went away."""


class Console:
    """Writes answers, notes and errors.

    Parameters
    ----------
    as_json : answers and errors are one JSON object on stdout

    Attributes
    ----------
    quiet : notes and the status line are left out
    """

    def __init__(self, as_json: bool) -> None:
        self.as_json = as_json
        self.quiet = False
        self._status_shown = False
        for stream in (sys.stdout, sys.stderr):
            with contextlib.suppress(AttributeError, ValueError):
                stream.reconfigure(errors="backslashreplace")

    def answer(self, text: str, data: dict[str, Any]) -> None:
        """Give the answer in the form that was asked for.

        Raises
        ------
        OutputError
            If stdout refuses it (a full disk, for instance).
        """
        self.clear_status()
        self._print(json.dumps(data, allow_nan=False) if self.as_json else text, sys.stdout)

    def error(self, message: str, where: str | None, more: dict[str, Any] | None = None) -> None:
        """Report what went wrong: one line on stderr, or an object on stdout.

        Parameters
        ----------
        message, where : what, and the file or place in it
        more : an answer that was found all the same; it joins the object
        """
        self.clear_status()
        if self.as_json:
            data = {"error": {"message": message, "where": where}, **(more or {})}
            with contextlib.suppress(OutputError):
                self._print(json.dumps(data, allow_nan=False), sys.stdout)
            return
        self._print(f"intplan: {where}: {message}" if where else f"intplan: {message}", sys.stderr)

    def notes(self, texts: Iterable[str]) -> None:
        """Write lines on stderr, such as warnings, unless asked to be quiet."""
        if self.quiet:
            return
        self.clear_status()
        for text in texts:
            self._print(text, sys.stderr)

    def status(self, text: str) -> None:
        """Show a status sentence in place of the last one, if someone watches a terminal."""
        if not self.shows_status():
            return
        width = shutil.get_terminal_size().columns - 1
        with contextlib.suppress(OSError, ValueError):
            sys.stderr.write(ERASE + text[:width])
            sys.stderr.flush()
            self._status_shown = True

    def shows_status(self) -> bool:
        """Tell whether a status sentence would be seen."""
        watched = sys.stderr is not None and sys.stderr.isatty()
        return watched and not self.quiet and os.environ.get("TERM") != "dumb"

    def clear_status(self) -> None:
        """Take the status sentence away."""
        if self._status_shown:
            with contextlib.suppress(OSError, ValueError):
                sys.stderr.write(ERASE)
                sys.stderr.flush()
            self._status_shown = False

    def _print(self, text: str, stream: TextIO | None) -> None:
        if stream is None:
            return
        try:
            stream.write(text + "\n")
            stream.flush()
        except BrokenPipeError:
            silence(stream)
        except OSError as error:
            silence(stream)
            if stream is sys.stdout:
                raise OutputError(error.strerror or str(error)) from error


def silence(stream: TextIO) -> None:
    """Let a stream that nobody reads go nowhere, so that Python's last flush is quiet too."""
    with contextlib.suppress(OSError, ValueError):
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, stream.fileno())
        os.close(nowhere)
