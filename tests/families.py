"""Families of planning problems for the benchmark and the tests: seeded, published and demo.

Every generator draws small integers from its own `numpy.random.Generator`, so that an instance is
the same on every machine and its data are exact in doubles.  The sizes were chosen so that the
reference of `tests.reference` needs some milliseconds up to about a second for each.
"""

from __future__ import annotations

import math
import tomllib
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

import intplan

if TYPE_CHECKING:
    from intplan.search.exact import ExactSystem
    from intplan.sheet import Sheet
    from intplan.sheet.problem import Problem

INSTANCES = Path(__file__).parent.parent / "instances"


@dataclass(frozen=True, eq=False)
class Instance:
    """One problem in plain arrays.

    Attributes
    ----------
    name, family : what to call it, and the family it is reported under
    aim : (activities,) doubles
    rows : (rules, activities) doubles
    row_least, row_most : (rules,) limits of the rules, infinite where there is none
    least, most : (activities,) bounds, infinite where there is none
    whole : (activities,) bool
    maximize : whether the aim is maximised
    constant : what the aim adds to its terms
    """

    name: str
    family: str
    aim: np.ndarray
    rows: np.ndarray
    row_least: np.ndarray
    row_most: np.ndarray
    least: np.ndarray
    most: np.ndarray
    whole: np.ndarray
    maximize: bool
    constant: float = 0.0

    @property
    def shape(self) -> tuple[int, int]:
        """The number of rules and of activities."""
        return self.rows.shape

    def arrays(self) -> dict[str, object]:
        """Return the arguments that `intplan.Sheet.from_arrays` takes, by keyword."""
        return {
            "aim": self.aim,
            "rows": self.rows,
            "row_least": self.row_least,
            "row_most": self.row_most,
            "least": self.least,
            "most": self.most,
            "whole": self.whole,
            "maximize": self.maximize,
        }


def problem_of(instance: Instance) -> Problem:
    """Return the exact problem of an instance."""
    return intplan.Sheet.from_arrays(**instance.arrays()).problem()


def exact_system_of(instance: Instance, cost: np.ndarray) -> ExactSystem:
    """Return an instance of integers, with a cost to minimise, for the exact arithmetic."""
    from intplan.search.exact import ExactSystem

    def limits(values: np.ndarray) -> list[int | None]:
        return [None if math.isinf(v) else int(v) for v in values]

    entries = np.array([[int(v) for v in row] for row in instance.rows], object)
    return ExactSystem(
        entries.reshape(instance.rows.shape),
        limits(instance.row_least),
        limits(instance.row_most),
        np.array([int(v) for v in cost], object),
        limits(instance.least),
        limits(instance.most),
    )


def build(
    name: str,
    family: str,
    aim: Sequence[float] | np.ndarray,
    rows: Sequence[Sequence[float]] | np.ndarray,
    row_least: object = -np.inf,
    row_most: object = np.inf,
    least: object = 0.0,
    most: object = np.inf,
    whole: object = True,
    maximize: bool = False,
) -> Instance:
    """Make an `Instance`; a single limit, bound or flag stands for a whole array of them."""
    aim = np.asarray(aim, float)
    rows = np.asarray(rows, float).reshape(-1, aim.size)

    def spread(value: object, size: int, kind: type) -> np.ndarray:
        return np.array(np.broadcast_to(np.asarray(value, kind), size))

    return Instance(
        name=name,
        family=family,
        aim=aim,
        rows=rows,
        row_least=spread(row_least, len(rows), float),
        row_most=spread(row_most, len(rows), float),
        least=spread(least, aim.size, float),
        most=spread(most, aim.size, float),
        whole=spread(whole, aim.size, bool),
        maximize=maximize,
    )


def instance_of(sheet: Sheet, name: str, family: str) -> Instance:
    """Return the arrays of a sheet in its own units, with a column for each bend of a soft rule."""
    bends = sheet.problem().bends
    activities = len(sheet.activities)
    aim = np.zeros(activities + len(bends))
    for column, coefficient in sheet.aim.terms:
        aim[column] = coefficient
    rows = np.zeros((len(sheet.rules), aim.size))
    for i, rule in enumerate(sheet.rules):
        for column, coefficient in rule.terms:
            rows[i, column] = coefficient
    maximize = sheet.aim.sense == "maximize"
    bend_most = []
    for bend in bends:
        rule = sheet.rules[bend.rule]
        rows[bend.rule, bend.column] = -1.0 if bend.side == "most" else 1.0
        aim[bend.column] = -float(rule.give) if maximize else float(rule.give)
        bend_most.append(_limit(rule.give_most, np.inf))
    return Instance(
        name=name,
        family=family,
        aim=aim,
        rows=rows,
        row_least=np.array([_limit(rule.least, -np.inf) for rule in sheet.rules]),
        row_most=np.array([_limit(rule.most, np.inf) for rule in sheet.rules]),
        least=np.array([_limit(a.least, -np.inf) for a in sheet.activities] + [0.0] * len(bends)),
        most=np.array([_limit(a.most, np.inf) for a in sheet.activities] + bend_most),
        whole=np.array([a.whole for a in sheet.activities] + [False] * len(bends)),
        maximize=maximize,
        constant=float(sheet.aim.constant),
    )


def _limit(value: Any, missing: float) -> float:
    return missing if value is None else float(value)


def index_of(folder: str) -> list[dict[str, Any]]:
    """Return the entries of ``instances/FOLDER/index.toml``, each with its `path` filled in."""
    entries = tomllib.loads((INSTANCES / folder / "index.toml").read_text("utf-8"))["instance"]
    return [entry | {"path": INSTANCES / folder / entry["file"]} for entry in entries]


def product_mix(
    resources: int, products: int, seed: int, scarce: int, limited: bool = True
) -> Instance:
    """How many batches of each product to run on shared resources, for the most profit.

    Every product can sell 2 to 12 batches.  About half of the resources matter to a product, and
    its profit follows what it uses, give or take 60 per cent.  The first `scarce` resources reach
    for 30 to 50 per cent of what all those batches would use, the others for 70 to 100 per cent.
    With ``limited=False`` only the resources stop a product.
    """
    rng = np.random.default_rng(seed)
    uses = rng.integers(1, 30, (resources, products)) * (rng.random((resources, products)) < 0.5)
    uses[rng.integers(resources, size=products), np.arange(products)] += 5
    profit = np.maximum(1, np.rint(uses.sum(0) * rng.uniform(0.4, 1.6, products)))
    sold = rng.integers(2, 13, products)
    tight, roomy = rng.uniform(0.3, 0.5, resources), rng.uniform(0.7, 1.0, resources)
    share = np.where(np.arange(resources) < scarce, tight, roomy)
    return build(
        f"product-mix-{resources}x{products}-{seed}",
        "product mix",
        profit,
        uses,
        row_most=np.floor(share * (uses @ sold)),
        most=sold if limited else np.inf,
        maximize=True,
    )


def demand_curve(hours: int, rng: np.random.Generator) -> np.ndarray:
    """People needed in each hour: few at night, two peaks a day, quieter on the last two days."""
    hour = np.arange(hours) % 24
    day = np.arange(hours) // 24
    peaks = 9 * np.exp(-(((hour - 10) / 3.5) ** 2)) + 11 * np.exp(-(((hour - 18) / 3) ** 2))
    week = np.where(day % 7 >= 5, 0.6, 1.0)
    return np.rint((3 + peaks) * week + rng.integers(0, 4, hours)).astype(int)


def shift_cover(hours: int, lengths: Sequence[int], seed: int, rest: bool = True) -> Instance:
    """How many people start a shift of each length in each hour, for the least pay.

    One rule an hour, round the clock; one activity a start and length; an hour at night costs
    more, and every shift has a fixed cost.  With `rest`, a shift of more than six hours has an
    unpaid hour of rest in its middle, in which it covers nothing.
    """
    rng = np.random.default_rng(seed)
    need = demand_curve(hours, rng)
    hour = np.arange(hours) % 24
    hourly = np.where((hour < 6) | (hour >= 22), 13, 10)
    columns, pay = [], []
    for start in range(hours):
        for length in lengths:
            stretch = np.arange(length)
            if rest and length > 6:
                stretch = stretch[stretch != length // 2]
            worked = (start + stretch) % hours
            column = np.zeros(hours)
            column[worked] = 1
            columns.append(column)
            pay.append(hourly[worked].sum() + 12 + int(rng.integers(0, 6)))
    return build(
        f"shift-cover-{hours}x{len(pay)}-{''.join(map(str, lengths))}-{seed}",
        "shift cover",
        pay,
        np.array(columns).T,
        row_least=need,
    )


def assignment(agents: int, jobs: int, seed: int) -> Instance:
    """Generalised assignment, drawn as the published sets c515 were: each job to one agent.

    Loads 5 to 25, gains 15 to 25, capacity 0.8 of the mean load of an agent (Cattrysse, Salomon
    and Van Wassenhove, 1994).
    """
    rng = np.random.default_rng(seed)
    load = rng.integers(5, 26, (agents, jobs))
    gain = rng.integers(15, 26, (agents, jobs))
    capacity = np.floor(0.8 * load.sum(1) / agents)
    return assignment_of(f"assignment-{agents}x{jobs}-{seed}", gain, load, capacity)


def assignment_of(name: str, gain: np.ndarray, load: np.ndarray, capacity: np.ndarray) -> Instance:
    """Return the generalised assignment problem of the given tables, each (agents, jobs)."""
    gain, load = np.asarray(gain), np.asarray(load)
    agents, jobs = gain.shape
    rows = np.zeros((agents + jobs, agents * jobs))
    for i in range(agents):
        rows[i, i * jobs : (i + 1) * jobs] = load[i]
        rows[agents + np.arange(jobs), i * jobs + np.arange(jobs)] = 1
    return build(
        name,
        "assignment",
        gain.ravel(),
        rows,
        row_least=np.r_[np.full(agents, -np.inf), np.ones(jobs)],
        row_most=np.r_[np.asarray(capacity, float), np.ones(jobs)],
        most=1,
        maximize=True,
    )


def selection(budgets: int, orders: int, seed: int) -> Instance:
    """Which orders to accept under several budgets, each of half of what all of them would use.

    The gain follows the mean use plus a random part, as is common in published sets of this kind.
    """
    rng = np.random.default_rng(seed)
    uses = rng.integers(1, 100, (budgets, orders))
    gain = np.rint(uses.mean(0) + rng.integers(0, 60, orders))
    return build(
        f"selection-{budgets}x{orders}-{seed}",
        "selection",
        gain,
        uses,
        row_most=np.floor(uses.sum(1) / 2),
        most=1,
        maximize=True,
    )


def covering(points: int, sets: int, density: float, seed: int) -> Instance:
    """Which sets to take so that every point is covered, for the least cost (set covering)."""
    rng = np.random.default_rng(seed)
    member = rng.random((points, sets)) < density
    for i in range(points):
        member[i, rng.choice(sets, 2, replace=False)] = True
    cost = 10 + member.sum(0) + rng.integers(0, 10, sets)
    return build(
        f"covering-{points}x{sets}-{density:.0%}-{seed}".replace("%", ""),
        "covering",
        cost,
        member,
        row_least=1,
        most=1,
    )


def lot_sizing(items: int, periods: int, seed: int) -> Instance:
    """Lot sizing with set-ups: what to make when, on one machine shared by all items.

    For each item and period: an amount made and a closing stock, both divisible, and a 0-1
    set-up.  Stock in + made - stock out = demand; made needs a set-up; the amounts and the set-up
    times of a period fit its hours.  Least cost of set-ups, stock and making.
    """
    rng = np.random.default_rng(seed)
    cells = items * periods
    demand = rng.integers(0, 41, (items, periods)) * (rng.random((items, periods)) < 0.8)
    demand[:, :3] = np.minimum(demand[:, :3], 15)
    setup_time = rng.integers(2, 7, items)
    setup_cost = rng.integers(60, 200, items)
    stock_cost = rng.integers(1, 5, items)
    hours = int(np.ceil(1.35 * demand.sum() / periods + setup_time.sum()))
    made, stock, setup = (np.arange(cells).reshape(items, periods) + k * cells for k in range(3))
    rows, row_least, row_most = [], [], []

    def add(terms: dict[int, float], least: float, most: float) -> None:
        row = np.zeros(3 * cells)
        row[list(terms)] = list(terms.values())
        rows.append(row)
        row_least.append(least)
        row_most.append(most)

    for i in range(items):
        for t in range(periods):
            carried = {int(stock[i, t - 1]): 1.0} if t else {}
            terms = {**carried, int(made[i, t]): 1.0, int(stock[i, t]): -1.0}
            add(terms, demand[i, t], demand[i, t])
            lot = min(int(demand[i, t:].sum()), hours)
            add({int(made[i, t]): 1.0, int(setup[i, t]): -float(lot)}, -np.inf, 0)
    for t in range(periods):
        terms = {int(made[i, t]): 1.0 for i in range(items)}
        terms |= {int(setup[i, t]): float(setup_time[i]) for i in range(items)}
        add(terms, -np.inf, hours)
    making = rng.integers(1, 4, (items, periods))
    return build(
        f"lot-sizing-{items}x{periods}-{seed}",
        "lot sizing",
        np.r_[making.ravel(), np.repeat(stock_cost, periods), np.repeat(setup_cost, periods)],
        rows,
        row_least,
        row_most,
        most=np.r_[np.full(2 * cells, np.inf), np.ones(cells)],
        whole=np.r_[np.zeros(2 * cells, bool), np.ones(cells, bool)],
    )


FAMILIES: dict[str, Callable[[], list[Instance]]] = {
    "product mix": lambda: [
        product_mix(10, 20, 1, scarce=5, limited=False),
        product_mix(10, 20, 2, scarce=8),
        product_mix(20, 40, 3, scarce=5),
        product_mix(20, 75, 2, scarce=5),
        product_mix(30, 75, 1, scarce=5),
        product_mix(50, 100, 2, scarce=5),
        product_mix(50, 150, 1, scarce=3),
    ],
    "shift cover": lambda: [
        shift_cover(24, (4, 6, 8), 1, rest=False),
        shift_cover(24, (4, 6, 9), 3),
        shift_cover(24, (5, 7, 9), 2),
        shift_cover(24, (5, 7, 9), 1),
        shift_cover(168, (4, 6, 9), 1),
        shift_cover(168, (4, 6, 9), 3),
    ],
    "assignment": lambda: [
        assignment(5, 15, 1),
        assignment(5, 20, 2),
        assignment(5, 30, 1),
        assignment(8, 24, 1),
        assignment(8, 24, 2),
        assignment(8, 32, 2),
    ],
    "selection": lambda: [
        selection(5, 20, 1),
        selection(5, 30, 1),
        selection(5, 30, 2),
        selection(10, 30, 1),
        selection(10, 30, 2),
        selection(10, 40, 2),
    ],
    "covering": lambda: [
        covering(30, 60, 0.1, 2),
        covering(30, 60, 0.1, 1),
        covering(30, 60, 0.2, 1),
        covering(50, 100, 0.1, 1),
        covering(50, 100, 0.1, 2),
        covering(50, 100, 0.15, 2),
    ],
    "lot sizing": lambda: [
        lot_sizing(1, 12, 1),
        lot_sizing(1, 24, 3),
        lot_sizing(2, 12, 1),
        lot_sizing(2, 18, 1),
        lot_sizing(3, 12, 2),
        lot_sizing(4, 12, 1),
    ],
}
