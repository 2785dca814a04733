"""Checks files to be written before the work starts, so that a long solve is never lost."""

from __future__ import annotations

import os
from collections.abc import Sequence

from intplan.errors import IntplanError
from intplan.files import refusal


def check_targets(targets: Sequence[str | None], sources: Sequence[str]) -> None:
    """Make sure that files can be written and that none of them is one that is read.

    Parameters
    ----------
    targets : the files to write, None for those that were not asked for
    sources : the files that are read

    Raises
    ------
    IntplanError
        Naming the first target that cannot be written or would destroy another file of this run.
    """
    taken = {os.path.realpath(source): "it is read by this command" for source in sources}
    for target in targets:
        if target is None:
            continue
        if not target:
            raise IntplanError("the name of a file to write is empty")
        path = os.path.realpath(target)
        if target.startswith("-"):
            raise IntplanError(f"this looks like an option; write ./{target} for a file", target)
        if problem := taken.get(path) or _obstacle(target, path):
            raise IntplanError(f"this file cannot be written: {problem}", where=target)
        taken[path] = "it is written twice"


def _obstacle(target: str, path: str) -> str | None:
    """Say what keeps a file from being written, None if nothing does.

    Parameters
    ----------
    target : its name as it was given
    path : the real path of that
    """
    folder = os.path.dirname(path)
    if not os.path.isdir(folder):
        return f"it lies in {folder}, which is no folder"
    if not os.access(folder, os.X_OK):
        return f"it lies in {folder}, which you may not enter"
    if os.path.isdir(path):
        return "it is a folder"
    if target.endswith(os.sep):
        return f"a name that ends in {os.sep} is that of a folder"
    if os.path.exists(path):
        if not os.access(path, os.W_OK):
            return "it is write-protected"
        if not os.path.isfile(path):
            return None  # a device or a pipe takes what it is given
    if not os.access(folder, os.W_OK):
        return f"it lies in {folder}, in which you may not write"
    if said := refusal(path):
        return f"no file can be made there ({said})"
    return None
