"""The assembled problem in the Matrix Market exchange format, read by scipy and re-solved by a general-purpose conic solver.

Format: Boisvert, Pozo, Remington, NISTIR 5935 (1996); the reader is `scipy.io.mmread`. Solver: PyPI `qoco`, in the example script of
the client, which sees nothing but the files.
"""

from __future__ import annotations

import json
import subprocess
import sys

import numpy as np
import pytest
import scipy.io
from underfoot.transport import plain

import conftest
import scenes
from cases import ROOT, walker_stance

EXAMPLE = ROOT / "clients" / "python" / "examples" / "resolve.py"
# Of the largest torque. The solver stops at 1e-12 of a cost, hence at about 1e-6 of its residuals.
BOUND = 1e-5


@pytest.fixture(scope="module")
def walker(client):
    return scenes.add_walker(client)


def written(tmp_path, request):
    """The request's problem as files, by the command line."""
    file = tmp_path / "request.json"
    file.write_text(json.dumps(plain(request)))
    folder = tmp_path / "deep" / "folder"
    subprocess.run([conftest.BINARY, "export", file, "--matrix-market", folder], check=True)
    return folder


def inline(request, model):
    source = {k: v for k, v in model.source.items() if k != "format"}
    return {**plain({**request, "model": source})}


@pytest.mark.parametrize("levels", [False, True], ids=["one level", "three levels"])
@pytest.mark.parametrize("facets", [8, None, "wrench"], ids=["pyramid", "cones", "wrench set"])
def test_the_example_finds_the_same_torques(client, walker, rng, tmp_path, facets, levels):
    request = scenes.standing(client, walker, walker_stance(rng, speed=0.05), facets=facets, levels=levels)
    answer = client.solve(request)
    assert answer.solved, answer.status
    folder = written(tmp_path, inline(request, walker))
    out = subprocess.run([sys.executable, EXAMPLE, folder], check=True, capture_output=True, text=True)
    torques = json.loads(out.stdout)
    gap = max(abs(torques[j] - answer.torque(j)) for j in answer.joints)
    assert gap < BOUND * np.abs(answer.torques).max(), (gap, out.stderr)


def test_soft_limits_have_their_excess(client, walker, tmp_path):
    """A soft normal force that cannot be had: the excess is a column of its level, and the torques agree all the same."""
    request = scenes.standing(client, walker, facets=8, levels=True)
    for contact in request["contacts"]:
        contact["normal_force"] = {"least": 600.0, "treatment": {"kind": "soft", "priority": 2, "weight": 1.0, "scale": 10.0}}
    answer = client.solve(request)
    assert answer.solved, answer.status
    folder = written(tmp_path, inline(request, walker))
    names = json.loads((folder / "names.json").read_text())
    excess = [i for i, c in enumerate(names["columns"]) if c["name"].startswith("excess:2:")]
    assert len(excess) == 2 and set(excess) <= set(names["levels"][1]["own"])
    out = subprocess.run([sys.executable, EXAMPLE, folder], check=True, capture_output=True, text=True)
    torques = json.loads(out.stdout)
    gap = max(abs(torques[j] - answer.torque(j)) for j in answer.joints)
    assert gap < BOUND * np.abs(answer.torques).max(), (gap, out.stderr)


def test_service_client_and_command_line_give_the_same_files(client, walker, tmp_path):
    request = scenes.standing(client, walker, facets=8, levels=True, include=("problem",))
    files = client.export(request)
    folder = written(tmp_path, inline(request, walker))
    assert {path.name: path.read_text() for path in folder.iterdir()} == files
    assert set(files) == {"A.mtx", "b.mtx", "G.mtx", "h.mtx", "q.mtx", "P_priority_1.mtx", "P_priority_2.mtx", "P_priority_3.mtx", "P_tie_break.mtx", "names.json"}


def test_the_files_hold_the_problem_of_the_answer(client, walker, tmp_path):
    """Every hard row of the exported JSON problem stands in A or G, number for number, and residuals are defined as there."""
    request = scenes.standing(client, walker, facets=None, levels=True, include=("problem",))
    problem = client.solve(request).document["problem"]
    folder = written(tmp_path, inline(request, walker))
    m = {name: np.asarray(scipy.io.mmread(folder / f"{name}.mtx").todense()) for name in ("A", "G")}
    v = {name: scipy.io.mmread(folder / f"{name}.mtx").ravel() for name in ("b", "h")}
    names = json.loads((folder / "names.json").read_text())
    n = len(problem["columns"])
    assert [c["name"] for c in names["columns"][:n]] == [c["name"] for c in problem["columns"]]
    assert len(names["equalities"]) == len(v["b"]) == m["A"].shape[0]
    assert len(names["inequalities"]) == len(v["h"]) == names["nonnegative"] + sum(names["second_order"])

    def dense(part):
        matrix = part["matrix"]
        out = np.zeros((matrix["rows"], matrix["columns"]))
        np.add.at(out, (matrix["row"], matrix["column"]), matrix["value"])
        return np.column_stack([out, part["rhs"]])

    hard = dense(problem["hard"])
    kinds = [c["kind"] for c in problem["hard"]["cones"] for _ in range(c["rows"])]
    equal = hard[[k == "zero" for k in kinds]]
    rest = np.vstack([hard[[k == kind for k in kinds]] for kind in ("nonnegative", "second_order")])
    assert np.array_equal(equal, np.column_stack([m["A"][: len(equal), :n], v["b"][: len(equal)]]))
    assert np.array_equal(rest, np.column_stack([m["G"][:, :n], v["h"]]))
    residuals = np.vstack([dense(level["residuals"]) for level in problem["levels"]] + [dense(problem["tie_break"])])
    below = m["A"][len(equal) :]
    assert np.array_equal(residuals, np.column_stack([below[:, :n], v["b"][len(equal) :]]))
    assert np.array_equal(below[:, n:], -np.eye(len(residuals)))
    weights = np.concatenate([level["residuals"]["weight"] for level in problem["levels"]] + [problem["tie_break"]["weight"]])
    p = sum(np.asarray(scipy.io.mmread(folder / level["file"]).todense()) for level in names["levels"])
    assert np.array_equal(np.diag(p)[n:], 2 * weights) and np.count_nonzero(p) == len(weights)
