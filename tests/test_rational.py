"""Square systems solved in rationals: checked by multiplying out, and against fractions."""

from fractions import Fraction

import numpy as np
import pytest

from intplan.search.rational import solve_rationally


def by_fractions(matrix: np.ndarray, right: list[int]) -> list[Fraction] | None:
    """Solve by elimination in fractions; None if the matrix is singular."""
    size = len(right)
    lines = [
        [Fraction(int(a)) for a in (*row, b)] for row, b in zip(matrix, right, strict=True)
    ]
    for k in range(size):
        pivot = next((i for i in range(k, size) if lines[i][k]), None)
        if pivot is None:
            return None
        lines[k], lines[pivot] = lines[pivot], lines[k]
        lines[k] = [a / lines[k][k] for a in lines[k]]
        for i in range(size):
            if i != k and lines[i][k]:
                factor = lines[i][k]
                lines[i] = [a - factor * b for a, b in zip(lines[i], lines[k], strict=True)]
    return [line[-1] for line in lines]


@pytest.mark.parametrize("largest", [3, 40, 10**6])
def test_random_systems(largest: int) -> None:
    rng = np.random.default_rng(largest)
    solved = 0
    for _ in range(60):
        size = int(rng.integers(1, 9))
        matrix = rng.integers(-largest, largest + 1, (size, size))
        right = rng.integers(-50, 51, size).tolist()
        found = solve_rationally(matrix, right)
        expected = by_fractions(matrix, right)
        if found is None:
            continue
        solved += 1
        assert expected == [Fraction(n, found[1]) for n in found[0]]
    assert solved > 50


def test_a_large_system_multiplies_out() -> None:
    rng = np.random.default_rng(5)
    matrix = rng.integers(-9, 10, (60, 60)) * (rng.random((60, 60)) < 0.2)
    matrix += 30 * np.eye(60, dtype=int)
    right = rng.integers(-99, 100, 60).tolist()
    numerators, unit = solve_rationally(matrix, right)
    product = matrix.astype(object) @ np.array(numerators, object)
    assert (product == np.array(right, object) * unit).all()
    assert unit.bit_length() > 64  # no double could have told


def test_no_answer_is_made_up() -> None:
    assert solve_rationally(np.array([[1, 2], [2, 4]]), [1, 3]) is None
    assert solve_rationally(np.array([[0]]), [1]) is None
    assert solve_rationally(np.array([[3]]), [1]) == ([1], 3)
    assert solve_rationally(np.zeros((0, 0), int), []) == ([], 1)
