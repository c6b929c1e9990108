"""The checker's own solvers on problems with known answers, before the service is held against them.

Sources: HS76 (Hock and Schittkowski 1981, published); second-order cone projection (Boyd and Vandenberghe 2004,
quoted from memory); the lexicographic examples and the exposed face: derived, by hand.
"""

import numpy as np
import pytest

from hierarchy import Level, Problem, Rows, solve

def level(a, b, soft=None, soft_weight=()):
    a = np.atleast_2d(np.asarray(a, float))
    n = a.shape[1]
    return Level(a, np.asarray(b, float), np.ones(len(b)), soft or Rows(np.zeros((0, n)), np.zeros(0)), np.asarray(soft_weight, float))


def problem(n, rows, levels):
    return Problem(n, rows, levels, [f"x{i}" for i in range(n)], np.ones(n))


def none(n):
    return Rows(np.zeros((0, n)), np.zeros(0), [])


BOTH = pytest.mark.parametrize("method", ["active set", "cone"])


@BOTH
def test_hs76(method):
    # 1/2 x'Px + q'x as least squares through the Cholesky factor of P.
    p = np.array([[2, 0, -1, 0], [0, 1, 0, 0], [-1, 0, 2, 1], [0, 0, 1, 1.0]])
    q = np.array([-1, -3, 1, -1.0])
    root = np.linalg.cholesky(p).T
    target = np.linalg.solve(root.T, -q)
    a = np.array([[1, 2, 1, 1], [3, 1, 2, -1], [0, -1, -4, 0], *(-np.eye(4))])
    b = np.array([5, 4, -1.5, 0, 0, 0, 0])
    out = solve(problem(4, Rows(a, b, [("nonnegative", 7)]), [level(root, target)]), method)
    assert np.allclose(out.x, np.array([3, 23, 0, 6]) / 11, atol=1e-9)
    assert out.residual < 1e-9


@BOTH
def test_levels_in_order(method):
    first = [level([[1, 1, 1]], [3]), level([[1, -1, 0], [1, -1, 0]], [1, 3]), level([[1, 0, 0]], [0])]
    out = solve(problem(3, none(3), first[:1] + first[1:] + [level(np.eye(3), np.zeros(3))]), method)
    assert np.allclose(out.x, [0, -2, 5], atol=1e-8) or np.allclose(out.x[0] - out.x[1], 2, atol=1e-8)
    assert out.costs[:2] == pytest.approx([0, 2], abs=1e-9)


@BOTH
def test_hard_limit_then_aim(method):
    rows = Rows(np.array([[1.0, 1.0]]), np.array([1.0]), [("nonnegative", 1)])
    out = solve(problem(2, rows, [level(np.eye(2), [2, 2])]), method)
    assert np.allclose(out.x, [0.5, 0.5], atol=1e-9) and out.costs[0] == pytest.approx(4.5)


@BOTH
def test_soft_limits_that_contradict(method):
    soft = Rows(np.array([[1.0, 0.0], [-1.0, 0.0]]), np.array([0.0, -1.0]), [("nonnegative", 2)])
    first = level(np.zeros((0, 2)).reshape(0, 2), [], soft, [1, 1])
    first.a = np.zeros((0, 2))
    levels = [first, level([[-1, 1]], [1]), level([[1, 0], [0, 1]], [7, 0])]
    out = solve(problem(2, none(2), levels), method)
    assert np.allclose(out.x, [0.5, 1.5], atol=1e-8)
    assert out.costs == pytest.approx([0.5, 0, 44.5], abs=1e-7)


def test_projection_on_a_cone():
    # |v| <= mu t, nearest to (30, 40; 60), mu = .5: (20.4, 27.2; 68).
    rows = Rows(-np.array([[0, 0, 0.5], [1, 0, 0], [0, 1, 0]]), np.zeros(3), [("second_order", 3)])
    out = solve(problem(3, rows, [level(np.eye(3), [30, 40, 60])]), "cone")
    assert np.allclose(out.x, [20.4, 27.2, 68], atol=1e-8)
    assert out.residual < 1e-8


@pytest.mark.parametrize("seed", range(6))
def test_two_solvers_agree_on_random_pyramids(seed):
    """Three levels, many degenerate facets, both methods: the same point, and both sets of conditions hold."""
    rng = np.random.default_rng(seed)
    n, contacts, facets = 20, 5, 8
    cones, a, b = [("zero", 4)], [rng.normal(size=(4, n))], [rng.normal(size=4)]
    for k in range(contacts):
        rows = np.zeros((facets, n))
        turn = 2 * np.pi * np.arange(facets) / facets
        rows[:, 3 * k : 3 * k + 3] = np.column_stack([np.cos(turn), np.sin(turn), np.full(facets, -0.3)])
        a.append(rows)
        b.append(np.zeros(facets))
        cones.append(("nonnegative", facets))
    rows = Rows(np.vstack(a), np.concatenate(b), cones)
    levels = [level(rng.normal(size=(6, n)), rng.normal(size=6)), level(rng.normal(size=(5, n)), rng.normal(size=5)), level(np.eye(n), np.zeros(n))]
    one, two = (solve(problem(n, rows, levels), method) for method in ("active set", "cone"))
    assert max(one.residual, two.residual) < 1e-9
    assert np.allclose(one.x, two.x, atol=1e-9)
    assert one.costs == pytest.approx(two.costs, abs=1e-9)

