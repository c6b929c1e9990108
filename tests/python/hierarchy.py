"""Strictly ordered conic programs solved by general-purpose solvers, as a check on the service's own answer.

The exported problem is data: columns, hard rows `A x + s = b, s in K`, levels of weighted residuals and soft limits,
and a tie-break. Nothing of the service's method is used here; a level is frozen by its residuals `A x = A x*` and its
soft limits by the excess they needed, which describes the set of optima of a level exactly (its cost is strictly
convex in the residuals and in the excess).

Two ways:
- `by_active_set` (PyPI `quadprog`, the dual active-set method of Goldfarb and Idnani 1983): nonnegative rows only;
- `by_cone_solver` (PyPI `qoco`, an interior-point method for conic programs).
Both leave small errors; `polish` then solves the optimality conditions of the last level on the active set found, and
`Outcome.residual` says how well the conditions (stationarity, feasibility, signs) hold. The problem is convex, so a
small residual proves the optimum whatever found it.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import quadprog
import qoco
import scipy.linalg
import scipy.sparse as sparse

Array = np.ndarray
RANK = 1e-9  # relative threshold of the rank decisions; the rows are scaled to order one
PROXIMAL = 1e-6  # weight of the proximal term that makes a level strictly convex
SWEEPS = 60  # bound on proximal steps


@dataclass
class Rows:
    """`A x + s = b`, s in the product of `cones`: (kind, size), kind `zero`, `nonnegative`, `second_order`."""

    a: Array
    b: Array
    cones: list[tuple[str, int]] = field(default_factory=list)


@dataclass
class Level:
    """Residual rows `weight (a x - b)^2` and soft rows with one slack weight per nonnegative row or cone block."""

    a: Array
    b: Array
    weight: Array
    soft: Rows
    soft_weight: Array


@dataclass
class Problem:
    columns: int
    hard: Rows
    levels: list[Level]
    names: list[str]
    scale: Array


@dataclass
class Outcome:
    x: Array
    costs: list[float]
    residual: float


def split(rows: Rows) -> tuple[tuple[Array, Array], tuple[Array, Array], list[tuple[Array, Array]]]:
    """Equalities, inequalities `A x <= b`, and second-order blocks."""
    at = 0
    n = rows.a.shape[1]
    equal, less, blocks = [], [], []
    for kind, size in rows.cones:
        part = slice(at, at + size)
        {"zero": equal, "nonnegative": less}.get(kind, blocks).append((rows.a[part], rows.b[part]))
        at += size
    assert at == len(rows.b), "cones do not cover the rows"

    def stack(parts):
        if not parts:
            return np.zeros((0, n)), np.zeros(0)
        return np.vstack([p[0] for p in parts]), np.concatenate([p[1] for p in parts])

    return stack(equal), stack(less), blocks


def lift(problem: Problem) -> tuple[Rows, list[tuple[Array, Array, Array]], Array]:
    """The problem with one more column per soft slack, so that every level is a plain least-squares level.

    Returns the rows over (x, t) with t >= 0 and the relaxed soft limits, the levels as (a, b, weight), and the
    index of the slack columns.
    """
    slacks = sum(len(level.soft_weight) for level in problem.levels)
    n = problem.columns + slacks
    a = [np.hstack([problem.hard.a, np.zeros((len(problem.hard.b), slacks))])]
    b = [problem.hard.b]
    cones = list(problem.hard.cones)
    levels = []
    at = problem.columns
    for level in problem.levels:
        rows = np.hstack([level.soft.a, np.zeros((len(level.soft.b), slacks))])
        own = []
        row = 0
        for kind, size in level.soft.cones:
            assert kind != "zero", "a soft equality"
            for first in range(row, row + size) if kind == "nonnegative" else [row]:
                rows[first, at] = -1.0
                own.append(at)
                at += 1
            row += size
        assert len(own) == len(level.soft_weight)
        a.append(rows)
        b.append(level.soft.b)
        cones += level.soft.cones
        unit = np.zeros((len(own), n))
        unit[np.arange(len(own)), own] = 1.0
        a.append(-unit)
        b.append(np.zeros(len(own)))
        cones.append(("nonnegative", len(own)))
        levels.append((
            np.vstack([np.hstack([level.a, np.zeros((len(level.b), slacks))]), unit]),
            np.concatenate([level.b, np.zeros(len(own))]),
            np.concatenate([level.weight, level.soft_weight]),
        ))
    return Rows(np.vstack(a), np.concatenate(b), cones), levels, np.arange(problem.columns, n)


def null_space(a: Array, b: Array) -> tuple[Array, Array]:
    """A particular solution and an orthonormal basis of all solutions of `a x = b` (rank by a stated threshold)."""
    if not len(b):
        return np.zeros(a.shape[1]), np.eye(a.shape[1])
    u, s, vt = np.linalg.svd(a, full_matrices=True)
    rank = int((s > RANK * s[0]).sum())
    x = vt[:rank].T @ ((u[:, :rank].T @ b) / s[:rank])
    return x, vt[rank:].T


def solve(problem: Problem, method: str) -> Outcome:
    """Lexicographic optimum, level after level in the null space of what is frozen."""
    rows, levels, _ = lift(problem)
    (ea, eb), (la, lb), blocks = split(rows)
    x0, z = null_space(ea, eb)
    feasibility = np.abs(ea @ x0 - eb).max() if len(eb) else 0.0
    assert feasibility < 1e-9, f"the equalities contradict each other by {feasibility}"
    costs = []
    x = x0
    for number, (a, b, w) in enumerate(levels):
        root = np.sqrt(w)[:, None]
        h_a, h_b = root * a @ z, (root[:, 0]) * (b - a @ x0)
        y, exact = minimise(h_a, h_b, la @ z, lb - la @ x0, [(ba @ z, bb - ba @ x0) for ba, bb in blocks], z.T @ (x - x0), method)
        x = x0 + z @ y
        costs.append(float((w * (a @ x - b) ** 2).sum()))
        if number + 1 < len(levels):
            # Freeze the residuals: stay on `a x = a x*`.
            _, free = null_space(a @ z, np.zeros(len(b)))
            x0, z = x, z @ free
            if z.shape[1] == 0:
                break
    return Outcome(x[: problem.columns], costs, exact)


def minimise(a: Array, b: Array, la: Array, lb: Array, blocks, start: Array, method: str) -> tuple[Array, float]:
    """min |a y - b|^2 subject to la y <= lb and the cone blocks; returns y and the residual of the optimality conditions.

    Where the cost is flat, a proximal term makes it strictly convex; the proximal steps are repeated until y rests.
    """
    h = a.T @ a
    y = start.copy()
    curvature = max(1e-300, np.abs(np.diag(h)).max()) if len(h) else 1.0
    for _ in range(SWEEPS):
        p = h + PROXIMAL * curvature * np.eye(len(y))
        q = -(a.T @ b) - PROXIMAL * curvature * y
        last = y
        y = quadratic(p, q, la, lb, blocks, method)
        if np.abs(y - last).max() < 1e-12 * max(1.0, np.abs(y).max()):
            break
    return polish(a, b, la, lb, blocks, y)


def quadratic(p: Array, q: Array, la: Array, lb: Array, blocks, method: str) -> Array:
    """One strictly convex program by the named solver."""
    if method == "active set":
        assert not blocks, "the active-set solver takes pyramids only"
        if not len(lb):
            return np.linalg.solve(p, -q)
        return quadprog.solve_qp(p, -q, -la.T, -lb)[0]
    return cone_solver(p, q, la, lb, blocks)


def cone_solver(p: Array, q: Array, la: Array, lb: Array, blocks) -> Array:
    """The same by an interior-point conic solver."""
    g = np.vstack([la] + [ba for ba, _ in blocks]) if blocks else la
    hh = np.concatenate([lb] + [bb for _, bb in blocks]) if blocks else lb
    if not len(hh):
        return np.linalg.solve(p, -q)
    sizes = np.array([len(bb) for _, bb in blocks], dtype=np.int32)
    solver = qoco.QOCO()
    solver.setup(len(q), len(hh), 0, sparse.csc_matrix(np.triu(p)), q, None, None, sparse.csc_matrix(g), hh, len(lb), len(sizes), sizes, abstol=1e-10, reltol=1e-10, max_iters=200)
    return np.array(solver.solve().x)


def polish(a: Array, b: Array, la: Array, lb: Array, blocks, y: Array) -> tuple[Array, float]:
    """Newton on the optimality conditions of the active set found, kept only where it makes them hold better."""
    best, score = y, optimality(a, b, la, lb, blocks, y)
    for threshold in (1e-6, 1e-4, 1e-8):
        trial = newton(a, b, la, lb, blocks, y, threshold)
        if trial is None:
            continue
        trial_score = optimality(a, b, la, lb, blocks, trial)
        if trial_score < score:
            best, score = trial, trial_score
    return best, score


def active(la: Array, lb: Array, blocks, y: Array, threshold: float):
    """Rows at their bound, cone blocks on their boundary, cone blocks at the apex."""
    rows = np.flatnonzero(lb - la @ y < threshold)
    edge, apex = [], []
    for i, (ba, bb) in enumerate(blocks):
        s = bb - ba @ y
        if s[0] < threshold:
            apex.append(i)
        elif s[0] - np.linalg.norm(s[1:]) < threshold * max(1.0, s[0]):
            edge.append(i)
    return rows, edge, apex


def gradients(la: Array, blocks, y: Array, found) -> tuple[Array, Array]:
    """Gradient rows of the active constraints g(y) <= 0 (cone edge: |s_bar| - s0), and the sum of no curvature."""
    rows, edge, apex = found
    out = [la[rows]]
    for i in edge:
        ba, bb = blocks[i]
        s = bb - ba @ y
        direction = s[1:] / np.linalg.norm(s[1:])
        out.append((-(direction @ ba[1:]) + ba[0])[None, :])
    for i in apex:
        out.append(blocks[i][0])
    return np.vstack(out)


def newton(a: Array, b: Array, la: Array, lb: Array, blocks, y: Array, threshold: float):
    """Solves the conditions of the active set; minimum-norm steps where they do not fix y."""
    found = active(la, lb, blocks, y, threshold)
    rows, edge, apex = found
    h = a.T @ a
    for _ in range(12):
        g = gradients(la, blocks, y, found)
        value = [la[rows] @ y - lb[rows]]
        for i in edge:
            ba, bb = blocks[i]
            s = bb - ba @ y
            value.append([np.linalg.norm(s[1:]) - s[0]])
        for i in apex:
            ba, bb = blocks[i]
            value.append(ba @ y - bb)
        value = np.concatenate(value)
        cost = h @ y - a.T @ b
        multiplier = np.linalg.lstsq(g.T, -cost, rcond=1e-11)[0] if len(value) else np.zeros(0)
        curved = h.copy()
        for j, i in enumerate(edge):
            ba, bb = blocks[i]
            s = bb - ba @ y
            norm = np.linalg.norm(s[1:])
            d = s[1:] / norm
            curved += max(0.0, multiplier[len(rows) + j]) * ba[1:].T @ ((np.eye(len(d)) - np.outer(d, d)) / norm) @ ba[1:]
        k = np.block([[curved, g.T], [g, np.zeros((len(value), len(value)))]])
        step = np.linalg.lstsq(k, -np.concatenate([cost, value]), rcond=1e-12)[0][: len(y)]
        if not np.isfinite(step).all() or np.abs(step).max() > 1e3 * max(1.0, np.abs(y).max()):
            return None
        y = y + step
        if np.abs(step).max() < 1e-14 * max(1.0, np.abs(y).max()):
            break
    return y


def optimality(a: Array, b: Array, la: Array, lb: Array, blocks, y: Array) -> float:
    """How far y is from the optimality conditions: infeasibility, and the distance of -gradient from the normal cone.

    The normal cone is spanned by nonnegative multiples of active rows (cone apex: any multiplier in the dual cone,
    here sampled by its edge towards the gradient through a second-order projection is not needed: the apex multiplier
    is found by least squares and checked for membership).
    """
    from scipy.optimize import nnls

    violation = max(0.0, float((la @ y - lb).max())) if len(lb) else 0.0
    for ba, bb in blocks:
        s = bb - ba @ y
        violation = max(violation, float(np.linalg.norm(s[1:]) - s[0]))
    found = active(la, lb, blocks, y, 1e-7)
    rows, edge, apex = found
    cost = a.T @ (a @ y - b)
    scale = max(1.0, float(np.abs(a.T @ b).max())) if len(b) else 1.0
    g = gradients(la, blocks, y, (rows, edge, []))
    if apex:
        # Dual cone of an apex block, approximated from inside by many of its edges: a generating set for nnls.
        generators = []
        for i in apex:
            ba, _ = blocks[i]
            for direction in _circle(len(ba) - 1):
                generators.append(ba[0] + direction @ ba[1:])
        g = np.vstack([g, np.array(generators)])
    if len(g):
        z, _ = nnls(g.T, -cost, maxiter=50 * max(10, len(g)))
        stationarity = float(np.abs(cost + g.T @ z).max())
    else:
        stationarity = float(np.abs(cost).max()) if len(cost) else 0.0
    return max(violation, stationarity / scale)


def _circle(dimension: int) -> Array:
    """Unit vectors that spread over a circle or sphere."""
    if dimension == 1:
        return np.array([[1.0], [-1.0]])
    if dimension == 2:
        t = np.linspace(0, 2 * np.pi, 720, endpoint=False)
        return np.column_stack([np.cos(t), np.sin(t)])
    rng = np.random.default_rng(0)
    v = rng.normal(size=(4000, dimension))
    return v / np.linalg.norm(v, axis=1)[:, None]
