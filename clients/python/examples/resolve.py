"""Solves an exported problem again with a general-purpose conic solver (PyPI `qoco`), level by level.

    underfoot export request.json --matrix-market folder
    python resolve.py folder

Needs numpy, scipy and qoco. Prints the torques (N m). Every level shares the unknowns z:

    minimise 1/2 z'P z + q'z   subject to   A z = b,   G z + s = h,   s in the cones,

and what a level owns (its residuals and excesses) is held by those after it. No step uses anything but the files.
"""

from __future__ import annotations

import json
import pathlib
import sys

import numpy as np
import qoco
import scipy.io
import scipy.sparse as sparse

# The closest that the solver reaches counts: where a cost is within 1e-12 of its least value, its residuals are within 1e-6 of theirs.
TOLERANCES = (1e-12, 1e-11, 1e-10, 1e-9)
# Singular values (relative) below which rows repeat others.
RANK = 1e-9


def read(folder: pathlib.Path):
    """The matrices by name, and what rows and columns mean."""
    names = json.loads((folder / "names.json").read_text())
    matrices = {path.stem: scipy.io.mmread(path) for path in sorted(folder.glob("*.mtx"))}
    vectors = {name: np.asarray(matrices[name]).ravel() for name in ("b", "h", "q")}
    return {**{name: sparse.csc_matrix(m) for name, m in matrices.items() if name not in vectors}, **vectors}, names


def solve(p, q, a, b, g, h, names):
    """One convex program; z. The equalities are solved first, `z = z0 + n y`, and the conic solver is left with y."""
    u, s, vt = np.linalg.svd(a.toarray())
    rank = int((s > RANK * s[0]).sum())
    z0 = vt[:rank].T @ ((u.T @ b)[:rank] / s[:rank])
    n = vt[rank:].T
    if not n.shape[1]:
        return z0, "nothing is left free"
    blocks = np.array(names["second_order"], dtype=np.int32)
    upper = sparse.csc_matrix(np.triu(n.T @ p @ n))
    cost, rows, rest = n.T @ (q + p @ z0), sparse.csc_matrix(g @ n), h - g @ z0
    for tolerance in TOLERANCES:
        solver = qoco.QOCO()
        solver.setup(len(cost), len(h), 0, upper, cost, None, None, rows, rest, names["nonnegative"], len(blocks), blocks, abstol=tolerance, reltol=tolerance, max_iters=200)
        found = solver.solve()
        if str(found.status) == "QOCO_SOLVED":
            return z0 + n @ np.array(found.x), f"solved to {tolerance}"
    raise SystemExit(f"the conic solver gave up: {found.status}")


def resolve(folder: pathlib.Path):
    """z after the last level."""
    m, names = read(folder)
    a, b = m["A"], m["b"]
    z = None
    for level in names["levels"]:
        p = m[pathlib.Path(level["file"]).stem]
        z, status = solve(p, m["q"], a, b, m["G"], m["h"], names)
        print(f"{level['file']}: {status}", file=sys.stderr)
        own = level["own"]
        hold = sparse.csc_matrix((np.ones(len(own)), (np.arange(len(own)), own)), shape=(len(own), len(z)))
        a, b = sparse.vstack([a, hold], format="csc"), np.concatenate([b, z[own]])
    return z, names


def main():
    z, names = resolve(pathlib.Path(sys.argv[1]))
    torques = {}
    for value, column in zip(z, names["columns"]):
        kind, _, joint = column["name"].partition(":")
        if kind == "torque":
            torques[joint] = value * column["scale"]
    json.dump(torques, sys.stdout, indent=1)
    print()


if __name__ == "__main__":
    main()
