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
import scipy.optimize
import scipy.sparse as sparse

Array = np.ndarray
RANK = 1e-9  # relative threshold of the rank decisions; the rows are scaled to order one
SWEEPS = 60  # bound on proximal steps
ROOM = (1e-11, 1e-9, 1e-7)  # by which the active-set solver sees limits relaxed
FEASIBLE = 1e-8  # by which a limit that cannot move any more may be exceeded


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


def solve(problem: Problem, method: str, proximal: tuple[float, ...] = (1e-6, 1e-8, 1e-10)) -> Outcome:
    """Lexicographic optimum, level after level in the null space of what is frozen.

    `proximal`: weights, relative to the largest curvature, of the term that makes a level strictly convex; each is tried
    and the feasible point of least cost kept.
    """
    rows, levels, _ = lift(problem)
    (ea, eb), (la, lb), blocks = split(rows)
    x0, z = null_space(ea, eb)
    feasibility = np.abs(ea @ x0 - eb).max() if len(eb) else 0.0
    assert feasibility < 1e-9, f"the equalities contradict each other by {feasibility}"
    costs = []
    x, worst = x0, 0.0
    for number, (a, b, w) in enumerate(levels):
        if z.shape[1] == 0:
            costs.append(float((w * (a @ x - b) ** 2).sum()))
            continue
        root = np.sqrt(w)[:, None]
        h_a, h_b = root * a @ z, (root[:, 0]) * (b - a @ x0)
        inside = la @ z, lb - la @ x0, [(ba @ z, bb - ba @ x0) for ba, bb in blocks]
        y, residual = minimise(h_a, h_b, *inside, z.T @ (x - x0), method, proximal)
        worst = max(worst, residual)
        x = x0 + z @ y
        costs.append(float((w * (a @ x - b) ** 2).sum()))
        if number + 1 < len(levels):
            # Freeze the residuals, and the faces of the limits that the optimum exposes.
            held, la, lb, blocks = faces(h_a, h_b, inside, y, (la, lb, blocks))
            frozen = np.vstack([root * a / max(1.0, float(root.max(initial=0.0))), held]) @ z
            _, free = null_space(frozen, np.zeros(len(frozen)))
            x0, z = x, z @ free
    return Outcome(x[: problem.columns], costs, worst)


def faces(a: Array, b: Array, inside, y: Array, outside) -> tuple[Array, Array, Array, list]:
    """What every optimum of a level has in common besides the residuals, from one set of multipliers.

    All optima are complementary to any optimal multiplier: a row with z > 0 is an equality; a cone block with z inside
    the dual cone is at its apex; with z on its boundary it stays on the ray opposite. Returns the rows that must not
    change any more, and the limits that remain.
    """
    la, lb, blocks = inside
    rows, edge, apex = touching(la, lb, blocks, y, 1e-8)
    cost = a.T @ (a @ y - b)
    least = 1e-9 * size_of(a, b, y)
    smooth = gradients(la, blocks, y, (rows, edge, []))
    around = [_circle(len(blocks[i][0]) - 1) for i in apex]
    generators = np.vstack([smooth] + [blocks[i][0][0] + d @ blocks[i][0][1:] for i, d in zip(apex, around)])
    _, z = distance(generators, cost)
    ola, olb, oblocks = outside
    held = [ola[rows[z[: len(rows)] > least]]]
    keep = np.ones(len(olb), bool)
    keep[rows[z[: len(rows)] > least]] = False
    more, remaining = [], list(oblocks)
    for j, i in enumerate(edge):
        if z[len(rows) + j] > least:
            ba, bb = blocks[i]
            s = bb - ba @ y
            _ray(held, more, oblocks[i], s[1:] / np.linalg.norm(s[1:]))
            remaining[i] = None
    at = len(smooth)
    for i, d in zip(apex, around):
        part = z[at : at + len(d)]
        at += len(d)
        # Generator rows are -(1, d)' times the slack's gradient: the multiplier is the sum of (1, d).
        top, side = float(part.sum()), part @ d
        if top - np.linalg.norm(side) > least:
            held.append(oblocks[i][0])
            remaining[i] = None
        elif top > least:
            _ray(held, more, oblocks[i], -side / np.linalg.norm(side))
            remaining[i] = None
    new_la = np.vstack([ola[keep]] + [m[0][None, :] for m in more])
    new_lb = np.concatenate([olb[keep], [m[1] for m in more]])
    return np.vstack(held), new_la, new_lb, [r for r in remaining if r is not None]


def _ray(held: list, more: list, block, direction: Array) -> None:
    """The block's slack stays on the ray (1, direction): the rest is frozen, its length may not turn negative."""
    ba, bb = block
    held.append(ba[1:] - np.outer(direction, ba[0]))
    more.append((ba[0], bb[0]))


def minimise(a: Array, b: Array, la: Array, lb: Array, blocks, start: Array, method: str, proximal: tuple[float, ...]) -> tuple[Array, float]:
    """min |a y - b|^2 subject to la y <= lb and the cone blocks; returns y and the residual of the optimality conditions.

    Where the cost is flat, a proximal term makes it strictly convex; the proximal steps are repeated until y rests.
    """
    # Rows that what is frozen leaves no say in anything any more.
    alive = np.abs(la).max(axis=1, initial=0.0) > RANK
    assert (lb[~alive] > -FEASIBLE).all(), "a frozen limit is violated"
    la, lb = la[alive], lb[alive]
    blocks = [(ba, bb) for ba, bb in blocks if np.abs(ba).max(initial=0.0) > RANK]
    # Residuals that are decided already.
    open_rows = np.abs(a).max(axis=1, initial=0.0) > RANK
    a, b = a[open_rows], b[open_rows]
    if not len(b):
        return start, violation(la, lb, blocks, start)
    h = a.T @ a
    curvature = np.abs(np.diag(h)).max()
    found = []
    for weight in proximal:
        y, dual = start.copy(), None
        try:
            for _ in range(SWEEPS):
                last = y
                y, dual = quadratic(h + weight * curvature * np.eye(len(y)), -(a.T @ b) - weight * curvature * y, la, lb, blocks, method)
                if np.abs(y - last).max() < 1e-12 * max(1.0, np.abs(y).max()):
                    break
        except ValueError:
            # The active-set solver gives up on degenerate corners when the curvature is small.
            continue
        if np.isfinite(y).all():
            y, score = polish(a, b, la, lb, blocks, y, dual / curvature)
            cost = float(((a @ y - b) ** 2).sum())
            # Steps of 1e-12 of the data's size count as equal, then the better conditions decide.
            step = 1e-12 * max(1e-12, float((b**2).sum()))
            found.append((violation(la, lb, blocks, y) > 1e-10, round(cost / step), score, len(found), y))
    assert found, f"no proximal weight of {proximal} led anywhere"
    best = min(found, key=lambda entry: entry[:4])
    return best[4], best[2]


def quadratic(p: Array, q: Array, la: Array, lb: Array, blocks, method: str) -> tuple[Array, Array]:
    """One strictly convex program by the named solver: y and the multipliers, inequalities before blocks."""
    if method == "active set":
        assert not blocks, "the active-set solver takes pyramids only"
        if not len(lb):
            return np.linalg.solve(p, -q), np.zeros(0)
        # A hair of room, so that rounding does not make frozen limits contradict each other; polishing removes it.
        for room in ROOM:
            try:
                out = quadprog.solve_qp(p, -q, -la.T, -(lb + room))
                return out[0], out[4]
            except ValueError:
                continue
        raise ValueError("the active-set solver found its own limits inconsistent")
    return cone_solver(p, q, la, lb, blocks)


def cone_solver(p: Array, q: Array, la: Array, lb: Array, blocks) -> tuple[Array, Array]:
    """The same by an interior-point conic solver."""
    g = np.vstack([la] + [ba for ba, _ in blocks]) if blocks else la
    hh = np.concatenate([lb] + [bb for _, bb in blocks]) if blocks else lb
    if not len(hh):
        return np.linalg.solve(p, -q), np.zeros(0)
    sizes = np.array([len(bb) for _, bb in blocks], dtype=np.int32)
    solver = qoco.QOCO()
    solver.setup(len(q), len(hh), 0, sparse.csc_matrix(np.triu(p)), q, None, None, sparse.csc_matrix(g), hh, len(lb), len(sizes), sizes, abstol=1e-11, reltol=1e-11, max_iters=200)
    out = solver.solve()
    return np.array(out.x), np.array(out.z)


def polish(a: Array, b: Array, la: Array, lb: Array, blocks, y: Array, dual: Array) -> tuple[Array, float]:
    """Newton on the optimality conditions of the active set found, kept only where it makes them hold better.

    The active set is read off slacks and multipliers: whichever of a complementary pair is smaller is taken as zero.
    For a cone block the pairs are the eigenvalues s0 -+ |s_bar| and z0 +- |z_bar|. Several weights of the comparison
    are tried, for pairs in which both are small, and the slacks alone.
    """
    best, score = y, optimality(a, b, la, lb, blocks, y)
    guesses = [read_off(la, lb, blocks, y, weight * dual) for weight in (1.0, 1e-2, 1e2, 1e-4, 1e4)]
    guesses += [touching(la, lb, blocks, y, threshold) for threshold in (1e-6, 1e-4, 1e-8)]
    for guess in guesses:
        trial = newton(a, b, blocks, y, la, lb, guess)
        if trial is None:
            continue
        trial_score = optimality(a, b, la, lb, blocks, trial)
        if trial_score < score:
            best, score = trial, trial_score
        if score < 1e-11:
            break
    return best, score


def read_off(la: Array, lb: Array, blocks, y: Array, dual: Array):
    """Active rows, cone blocks on their boundary, cone blocks at the apex, from slacks and multipliers."""
    rows = np.flatnonzero(lb - la @ y < dual[: len(lb)])
    edge, apex = [], []
    at = len(lb)
    for i, (ba, bb) in enumerate(blocks):
        s, z = bb - ba @ y, dual[at : at + len(bb)]
        at += len(bb)
        s_bar, z_bar = np.linalg.norm(s[1:]), np.linalg.norm(z[1:])
        if s[0] + s_bar < z[0] - z_bar:
            apex.append(i)
        elif s[0] - s_bar < z[0] + z_bar:
            edge.append(i)
    return rows, edge, apex


def touching(la: Array, lb: Array, blocks, y: Array, threshold: float):
    """The same from the slacks alone."""
    rows = np.flatnonzero(lb - la @ y < threshold)
    edge, apex = [], []
    for i, (ba, bb) in enumerate(blocks):
        s = bb - ba @ y
        if s[0] < threshold:
            apex.append(i)
        elif s[0] - np.linalg.norm(s[1:]) < threshold * max(1.0, s[0]):
            edge.append(i)
    return rows, edge, apex


def gradients(la: Array, blocks, y: Array, found) -> Array:
    """Gradient rows of the active constraints g(y) <= 0; on a cone's boundary g = |s_bar| - s0, at its apex g = -s."""
    rows, edge, apex = found
    out = [la[rows]]
    for i in edge:
        ba, bb = blocks[i]
        s = bb - ba @ y
        direction = s[1:] / max(1e-300, np.linalg.norm(s[1:]))
        out.append((ba[0] - direction @ ba[1:])[None, :])
    for i in apex:
        out.append(blocks[i][0])
    return np.vstack(out)


def newton(a: Array, b: Array, blocks, y: Array, la: Array, lb: Array, found):
    """Solves the conditions of the active set; minimum-norm steps where they do not fix y."""
    rows, edge, apex = found
    h = a.T @ a
    for _ in range(15):
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
            norm = max(1e-300, np.linalg.norm(s[1:]))
            d = s[1:] / norm
            curved += max(0.0, multiplier[len(rows) + j]) * ba[1:].T @ ((np.eye(len(d)) - np.outer(d, d)) / norm) @ ba[1:]
        k = np.block([[curved, g.T], [g, np.zeros((len(value), len(value)))]])
        if not np.isfinite(k).all():
            return None
        step = np.linalg.lstsq(k, np.concatenate([-cost, -value]), rcond=1e-13)[0][: len(y)]
        if not np.isfinite(step).all() or np.abs(step).max(initial=0.0) > 1e3 * max(1.0, np.abs(y).max()):
            return None
        y = y + step
        if np.abs(step).max(initial=0.0) < 1e-14 * max(1.0, np.abs(y).max()):
            break
    return y


def optimality(a: Array, b: Array, la: Array, lb: Array, blocks, y: Array) -> float:
    """How far y is from optimal: the larger of its infeasibility and the distance of -gradient from the normal cone.

    The normal cone is generated by the gradients of what touches; at a cone's apex by the edges of the dual cone, whose
    circle is sampled and then refined around the edges in use, so that the distance found is never too small.
    """
    outside = violation(la, lb, blocks, y)
    rows, edge, apex = touching(la, lb, blocks, y, 1e-7)
    cost = a.T @ (a @ y - b)
    scale = size_of(a, b, y)
    smooth = gradients(la, blocks, y, (rows, edge, []))
    if not apex:
        return max(outside, distance(smooth, cost)[0] / scale)
    directions = [_circle(len(blocks[i][0]) - 1) for i in apex]
    best = np.inf
    for zoom in range(6):
        generators = [smooth] + [blocks[i][0][0] + d @ blocks[i][0][1:] for i, d in zip(apex, directions)]
        found, z = distance(np.vstack(generators), cost)
        best = min(best, found)
        if best < 1e-12 * scale:
            break
        at = len(smooth)
        finer = []
        for d in directions:
            used = d[z[at : at + len(d)] > 0]
            at += len(d)
            near = used[:, None, :] + 0.01 * 0.1**zoom * _circle(d.shape[1])[:: 24 if d.shape[1] == 2 else 400][None]
            near = near.reshape(-1, d.shape[1])
            finer.append(np.vstack([d[::8], used, near / np.linalg.norm(near, axis=1)[:, None]]))
        directions = finer
    return max(outside, best / scale)


def violation(la: Array, lb: Array, blocks, y: Array) -> float:
    """Largest violation of a limit."""
    worst = max(0.0, float((la @ y - lb).max(initial=0.0)))
    for ba, bb in blocks:
        s = bb - ba @ y
        worst = max(worst, float(np.linalg.norm(s[1:]) - s[0]))
    return worst


def size_of(a: Array, b: Array, y: Array) -> float:
    """Size of the terms that make up the gradient a'(a y - b): what its rounding is measured against."""
    return max(1e-12, float((np.abs(a).T @ (np.abs(a) @ np.abs(y) + np.abs(b))).max(initial=0.0)))


def distance(generators: Array, cost: Array) -> tuple[float, Array]:
    """Least distance (largest component) of -cost from nonnegative combinations of the generator rows."""
    if not len(generators) or not len(cost):
        return float(np.abs(cost).max(initial=0.0)), np.zeros(len(generators))
    size = np.maximum(np.linalg.norm(generators, axis=1), 1e-300)
    z, _ = scipy.optimize.nnls((generators / size[:, None]).T, -cost, maxiter=50 * (10 + len(generators)))
    return float(np.abs(cost + generators.T @ (z / size)).max()), z


def _circle(dimension: int) -> Array:
    """Unit vectors that spread over a circle or sphere."""
    if dimension == 1:
        return np.array([[1.0], [-1.0]])
    if dimension == 2:
        t = np.linspace(0, 2 * np.pi, 360, endpoint=False)
        return np.column_stack([np.cos(t), np.sin(t)])
    v = np.random.default_rng(0).normal(size=(4000, dimension))
    return v / np.linalg.norm(v, axis=1)[:, None]
