"""The outside reference: SciPy's own linear and mixed-integer routines, silenced and timed.

Only tests and benchmarks use it.  It is called with its default method and a zero gap, what it
prints is discarded at the file-descriptor level, and only its status numbers are read.
"""

from __future__ import annotations

import contextlib
import os
import sys
import time
from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from scipy.optimize import Bounds, LinearConstraint, linprog, milp
from scipy.sparse import csr_array

from tests.families import Instance

OPTIMAL, LIMIT, INFEASIBLE, UNBOUNDED, OTHER = range(5)


class Reference(NamedTuple):
    """What the reference says: its status number, value in aim units, plan, seconds and nodes."""

    status: int
    value: float | None
    x: np.ndarray | None
    seconds: float
    nodes: int


@contextlib.contextmanager
def silenced() -> Iterator[None]:
    """Send whatever is written to the file descriptors 1 and 2 to nowhere.

    The descriptors are duplicated and put back, so this nests and is safe while a test runner
    captures the output itself.
    """
    for stream in (sys.stdout, sys.stderr):
        with contextlib.suppress(Exception):
            stream.flush()
    nowhere = os.open(os.devnull, os.O_WRONLY)
    kept = [(fd, os.dup(fd)) for fd in (1, 2)]
    try:
        for fd, _ in kept:
            os.dup2(nowhere, fd)
        yield
    finally:
        for fd, copy in kept:
            os.dup2(copy, fd)
            os.close(copy)
        os.close(nowhere)


def reference_milp(instance: Instance, time_limit: float | None = None) -> Reference:
    """Solve `instance` in whole units to a zero gap.

    Parameters
    ----------
    instance : the problem
    time_limit : seconds, none by default

    Notes
    -----
    Building its arguments is not part of the seconds.  The rows go in as a sparse matrix; on the
    families of `tests.families` that was measured to be as fast as a dense one, within 2 per cent.
    """
    sign = -1.0 if instance.maximize else 1.0
    cost = sign * instance.aim
    constraints = []
    if len(instance.rows):
        rows = csr_array(instance.rows)
        constraints = [LinearConstraint(rows, instance.row_least, instance.row_most)]
    options: dict[str, float] = {"mip_rel_gap": 0.0}
    if time_limit is not None:
        options["time_limit"] = time_limit
    bounds = Bounds(instance.least, instance.most)
    integrality = instance.whole.astype(int)
    with silenced():
        started = time.perf_counter()
        answer = milp(
            cost, integrality=integrality, bounds=bounds, constraints=constraints, options=options
        )
        seconds = time.perf_counter() - started
    value = None if answer.x is None else float(sign * answer.fun) + instance.constant
    return Reference(answer.status, value, answer.x, seconds, int(answer.mip_node_count or 0))


def reference_linprog(instance: Instance) -> Reference:
    """Solve the relaxation of `instance`, where fractions are allowed."""
    sign = -1.0 if instance.maximize else 1.0
    cost = sign * instance.aim
    equal = instance.row_least == instance.row_most
    above = np.isfinite(instance.row_least) & ~equal
    below = np.isfinite(instance.row_most) & ~equal
    matrix = csr_array(np.r_[instance.rows[below], -instance.rows[above]])
    limits = np.r_[instance.row_most[below], -instance.row_least[above]]
    equalities = csr_array(instance.rows[equal])
    bounds = np.c_[instance.least, instance.most]
    with silenced():
        started = time.perf_counter()
        answer = linprog(cost, matrix, limits, equalities, instance.row_most[equal], bounds=bounds)
        seconds = time.perf_counter() - started
    value = None if answer.status != OPTIMAL else float(sign * answer.fun) + instance.constant
    return Reference(answer.status, value, answer.x, seconds, 0)


def settle(instance: Instance, answer: Reference) -> int:
    """Return the status number, with `OTHER` split into `INFEASIBLE` and `UNBOUNDED`.

    The reference may say no more than "one of the two"; then the problem without its aim tells
    whether a plan exists.
    """
    if answer.status != OTHER:
        return answer.status
    no_aim = Instance(**{**vars(instance), "aim": np.zeros_like(instance.aim)})
    plain = reference_milp(no_aim)
    return INFEASIBLE if plain.status == INFEASIBLE else UNBOUNDED
