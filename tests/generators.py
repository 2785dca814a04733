"""Small random problems for the differential tests, and a brute force that settles the tiny ones.

`random_problem` draws from a seeded generator and walks through every kind in turn; `problems` is
the same idea as a hypothesis strategy, which shrinks.  All data are small integers.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from hypothesis import strategies as st

from tests.families import Instance, build

BRUTE_FORCE_LIMIT = 200_000

Bounds = tuple[np.ndarray, np.ndarray]
Limits = tuple[np.ndarray, np.ndarray]


def random_problem(seed: int) -> Instance:
    """Return the problem of the given seed; its `family` is its kind, and seeds cycle through all.

    Most have 1 to 8 activities and rules, every seventh round up to 12 of each.  The limits of
    the rules are drawn around a plan inside the bounds, so that a good half of the problems have
    a plan, except for the kinds whose point is that there is none.
    """
    kinds = tuple(KINDS)
    kind = kinds[seed % len(kinds)]
    rng = np.random.default_rng([seed, 2024])
    largest = 12 if seed // len(kinds) % 7 == 6 else 8
    activities, rules = (int(v) for v in rng.integers(1, largest + 1, 2))
    return KINDS[kind](f"{kind}-{seed}", kind, rng, rules, activities)


def tiny_problem(seed: int) -> Instance:
    """Return a whole, bounded problem that `brute_force` can settle."""
    rng = np.random.default_rng([seed, 4048])
    activities, rules = (int(v) for v in rng.integers(1, 6, 2))
    low = rng.integers(-3, 2, activities)
    bounds = (low, low + rng.integers(0, 5, activities))
    return draw(f"tiny-{seed}", "tiny", rng, rules, activities, bounds)


def brute_force(instance: Instance) -> tuple[str, int | None]:
    """Settle a tiny problem by trying every plan, in integers.

    Parameters
    ----------
    instance : whole activities with finite bounds, integer data

    Returns
    -------
    outcome, value : ``"optimal"`` and the best value of the aim, or ``"infeasible"`` and None

    Raises
    ------
    ValueError
        If the problem is not of that kind or has more than `BRUTE_FORCE_LIMIT` candidates.
    """
    finite = np.isfinite(instance.least).all() and np.isfinite(instance.most).all()
    if not (instance.whole.all() and finite):
        raise ValueError("brute force needs whole activities with finite bounds")
    for data in (instance.aim, instance.rows):
        if not (data == np.rint(data)).all():
            raise ValueError("brute force needs integer data")
    low, high = np.ceil(instance.least).astype(int), np.floor(instance.most).astype(int)
    if math.prod(int(v) for v in np.maximum(high - low + 1, 0)) > BRUTE_FORCE_LIMIT:
        raise ValueError("too many candidates for brute force")
    ranges = [np.arange(a, b + 1) for a, b in zip(low, high, strict=True)]
    plans = np.stack(np.meshgrid(*ranges, indexing="ij"), -1).reshape(-1, low.size)
    values = plans @ instance.rows.astype(int).T
    good = ((values >= instance.row_least) & (values <= instance.row_most)).all(1)
    if not good.any():
        return "infeasible", None
    aims = plans[good] @ instance.aim.astype(int)
    return "optimal", int(aims.max() if instance.maximize else aims.min())


def occupied(rows: np.ndarray) -> np.ndarray:
    """Return `rows` with a 1 in each row of zeros, for a rule without activities is an error."""
    rows[~rows.any(1), 0] = 1
    return rows


def boxed(rng: np.random.Generator, activities: int) -> Bounds:
    """Return bounds from 0 to a small number."""
    return np.zeros(activities), rng.integers(1, 9, activities).astype(float)


def open_above(rng: np.random.Generator, activities: int) -> Bounds:
    """Return bounds from 0, most of them without an upper one."""
    most = rng.integers(2, 9, activities).astype(float)
    return np.zeros(activities), np.where(rng.random(activities) < 0.7, np.inf, most)


def assorted(rng: np.random.Generator, activities: int) -> Bounds:
    """Return bounds of every sort: fixed, free, negative, open below, open above, 0-1."""
    sort = rng.integers(0, 7, activities)
    low = rng.integers(-6, 3, activities).astype(float)
    high = low + rng.integers(1, 7, activities)
    low = np.select([sort == 0, sort == 1, sort == 2], [high, -np.inf, -np.inf], low)
    high = np.where((sort == 1) | (sort == 3), np.inf, high)
    low, high = np.where(sort == 4, 0, low), np.where(sort == 4, 1, high)
    return low, high


def inner_plan(rng: np.random.Generator, bounds: Bounds) -> np.ndarray:
    """Return a whole plan inside the bounds, near 0 where they are infinite."""
    low, high = bounds
    low = np.where(np.isfinite(low), low, np.where(np.isfinite(high), high - 6, -4))
    high = np.where(np.isfinite(high), high, low + 6)
    return rng.integers(low.astype(int), high.astype(int) + 1).astype(float)


def limits_around(
    rng: np.random.Generator, values: np.ndarray, slack: int, reach: int = 0
) -> Limits:
    """Return limits of random sorts that `values` meet when `reach` is 0, and may miss otherwise.

    Parameters
    ----------
    values : (rules,) the values of the rules at a plan
    slack : how far a limit may lie from the value
    reach : how far a limit may be pushed past the value
    """
    sort = rng.integers(0, 4, values.size)
    below, above = rng.integers(-reach, slack + 1, (2, values.size))
    low, high = values - below, values + above
    low, high = np.minimum(low, high), np.maximum(low, high)
    low = np.where(sort == 0, -np.inf, np.where(sort == 3, values, low))
    high = np.where(sort == 1, np.inf, np.where(sort == 3, values, high))
    return low, high


def draw(
    name: str,
    kind: str,
    rng: np.random.Generator,
    rules: int,
    activities: int,
    bounds: Bounds,
    whole: object = True,
    slack: int = 9,
    reach: int = 3,
    density: float = 0.7,
) -> Instance:
    """Draw coefficients, a plan inside `bounds` and limits around it."""
    used = rng.random((rules, activities)) < density
    rows = occupied(rng.integers(-6, 10, (rules, activities)) * used)
    low, high = limits_around(rng, rows @ inner_plan(rng, bounds), slack, reach)
    aim = rng.integers(-9, 10, activities)
    maximize = bool(rng.random() < 0.5)
    return build(name, kind, aim, rows, low, high, *bounds, whole=whole, maximize=maximize)


def mixed_flags(rng: np.random.Generator, activities: int) -> np.ndarray:
    """Return flags of which about half are whole."""
    return rng.random(activities) < 0.5


def packing(
    name: str, kind: str, rng: np.random.Generator, rules: int, activities: int
) -> Instance:
    """Draw a product mix without upper bounds: bounded when every activity uses something."""
    rows = occupied(rng.integers(0, 10, (rules, activities)))
    aim = rng.integers(1, 20, activities)
    return build(name, kind, aim, rows, row_most=rng.integers(5, 60, rules), maximize=True)


def tied(name: str, kind: str, rng: np.random.Generator, rules: int, activities: int) -> Instance:
    """Draw a covering or packing problem full of ties: 0-1 coefficients and equal prices."""
    rows = occupied(rng.integers(0, 2, (rules, activities)))
    cover = bool(rng.random() < 0.5)
    limit = rng.integers(1, 3, rules).astype(float)
    least, most = (limit, np.inf) if cover else (-np.inf, limit)
    return build(name, kind, np.ones(activities), rows, least, most, most=2, maximize=not cover)


def degenerate(
    name: str, kind: str, rng: np.random.Generator, rules: int, activities: int
) -> Instance:
    """Draw rules that are all tight at one plan, some of them repeated, scaled or turned round."""
    bounds = boxed(rng, activities)
    plan = inner_plan(rng, bounds)
    rows = occupied(rng.integers(-4, 6, (rules, activities)))
    copies, factors = rng.integers(0, rules, rules), rng.choice([1, 2, -1], (rules, 1))
    rows = np.where(rng.random((rules, 1)) < 0.4, rows[copies] * factors, rows)
    low, high = limits_around(rng, rows @ plan, slack=0)
    aim = rng.integers(-5, 6, activities)
    return build(name, kind, aim, rows, low, high, *bounds, maximize=bool(rng.random() < 0.5))


def equalities(
    name: str, kind: str, rng: np.random.Generator, rules: int, activities: int
) -> Instance:
    """Draw equality rules, of which a few hold no whole plan."""
    used = rng.random((rules, activities)) < 0.6
    rows = occupied(rng.integers(0, 8, (rules, activities)) * used)
    bounds = boxed(rng, activities)
    values = rows @ inner_plan(rng, bounds) + (rng.random(rules) < 0.15)
    aim = rng.integers(-9, 10, activities)
    return build(name, kind, aim, rows, values, values, *bounds)


KINDS: dict[str, Callable[[str, str, np.random.Generator, int, int], Instance]] = {
    "boxed": lambda name, kind, rng, m, n: draw(name, kind, rng, m, n, boxed(rng, n)),
    "packing": packing,
    "open": lambda name, kind, rng, m, n: draw(name, kind, rng, m, n, open_above(rng, n)),
    "assorted": lambda name, kind, rng, m, n: draw(name, kind, rng, m, n, assorted(rng, n)),
    "degenerate": degenerate,
    "mixed": lambda name, kind, rng, m, n: draw(
        name, kind, rng, m, n, open_above(rng, n), mixed_flags(rng, n)
    ),
    "divisible": lambda name, kind, rng, m, n: draw(
        name, kind, rng, m, n, assorted(rng, n), whole=False
    ),
    "equality": equalities,
    "tied": tied,
    "impossible": lambda name, kind, rng, m, n: draw(
        name, kind, rng, m, n, boxed(rng, n), slack=2, reach=12
    ),
    "mixed assorted": lambda name, kind, rng, m, n: draw(
        name, kind, rng, m, n, assorted(rng, n), mixed_flags(rng, n)
    ),
    "loose": lambda name, kind, rng, m, n: draw(
        name, kind, rng, m, n, open_above(rng, n), density=0.3
    ),
}


@st.composite
def problems(
    draw_from: st.DrawFn, largest: int = 5, bounded: bool = False, whole: bool | None = None
) -> Instance:
    """Draw a small problem with hypothesis.

    Parameters
    ----------
    largest : the most activities and rules
    bounded : only whole activities with small bounds, which `brute_force` settles
    whole : all activities whole or all divisible; None mixes them
    """

    def numbers(low: int, high: int, count: int) -> list[int]:
        return draw_from(st.lists(st.integers(low, high), min_size=count, max_size=count))

    activities = draw_from(st.integers(1, largest))
    rules = draw_from(st.integers(0, largest))
    cells = [numbers(-5, 8, activities) for _ in range(rules)]
    rows = occupied(np.array(cells, int).reshape(rules, activities))
    least = np.array(numbers(-2, 2, activities), float)
    most = least + numbers(0, 4, activities)
    if not bounded:
        missing = np.array(numbers(0, 5, activities))
        least = np.where((missing == 1) | (missing == 3), -np.inf, least)
        most = np.where((missing == 2) | (missing == 3), np.inf, most)
    row_least = np.array(numbers(-20, 20, rules), float)
    row_most = row_least + numbers(0, 12, rules)
    side = np.array(numbers(0, 2, rules))
    flags = [True] * activities
    if not bounded and whole is None:
        flags = draw_from(st.lists(st.booleans(), min_size=activities, max_size=activities))
    return build(
        "drawn",
        "drawn",
        numbers(-9, 9, activities),
        rows,
        np.where(side == 1, -np.inf, row_least),
        np.where(side == 2, np.inf, row_most),
        least,
        most,
        whole=flags if whole is None else whole,
        maximize=draw_from(st.booleans()),
    )
