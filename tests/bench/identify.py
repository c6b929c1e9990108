"""Identification beside numpy's batch solution of the same regression, in one run.

    .venv/bin/python tests/bench/identify.py [ROWS]

The log is made up: one sole, k, b and the rest height unknown. numpy: columns of the regression formed by vectorised quadrature
over the sole, then `lstsq` on the 6 rows of every sample, from arrays that are in memory already. Here: the whole command, from
the CSV file to the answer; `cargo bench --bench identify` gives the recursion alone. Medians of interleaved runs.
"""

import json
import pathlib
import statistics
import subprocess
import sys
import tempfile
import time

import numpy as np

ROOT = pathlib.Path(__file__).parents[2]
sys.path.insert(0, str(ROOT / "tests/python"))

from ground_reference import quadrature  # noqa: E402
from made_up_walk import FOOT, PATCHES, SETTINGS, csv, log  # noqa: E402

ROUNDS = 5
RADIUS = np.sqrt((0.22**2 + 0.10**2) / 12)


def rotations(q):
    x, y, z, w = q.T
    return np.stack(
        [
            np.stack([1 - 2 * (y * y + z * z), 2 * (x * y - z * w), 2 * (x * z + y * w)], -1),
            np.stack([2 * (x * y + z * w), 1 - 2 * (x * x + z * z), 2 * (y * z - x * w)], -1),
            np.stack([2 * (x * z - y * w), 2 * (y * z + x * w), 1 - 2 * (x * x + y * y)], -1),
        ],
        -2,
    )


def batch(rows):
    """k, b and k z0 by lstsq, world axes."""
    points, weights = quadrature(FOOT)
    rotation = rotations(rows[:, 10:14])
    arms = np.einsum("nij,pj->npi", rotation, points)
    gap = points[None] - rows[:, None, 7:10] - arms
    speed = rows[:, None, 14:17] + np.cross(rows[:, None, 17:20], arms)
    up = np.broadcast_to([0.0, 0.0, 1.0], gap.shape)
    columns = []
    for traction in (gap * 1e6, -speed * 1e4, up * 1e4):
        force = np.einsum("p,npi->ni", weights, traction)
        moment = np.einsum("p,npi->ni", weights, np.cross(arms, traction)) / RADIUS
        columns.append(np.concatenate([force, moment], 1).ravel())
    force = np.einsum("nij,nj->ni", rotation, rows[:, 1:4])
    moment = np.einsum("nij,nj->ni", rotation, rows[:, 4:7]) / RADIUS
    found = np.linalg.lstsq(np.stack(columns, 1), np.concatenate([force, moment], 1).ravel(), rcond=None)[0]
    return found[0] * 1e6, found[1] * 1e4


def main():
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 100_000
    rows = log(1, 0.001, count * 0.001 - 0.1, (2.0, 0.1), PATCHES[:1])[:count]
    stance = rows[rows[:, 3] > 40.0]
    with tempfile.TemporaryDirectory() as where:
        path, settings = pathlib.Path(where) / "log.csv", pathlib.Path(where) / "settings.json"
        path.write_text(csv(rows))
        settings.write_text(json.dumps(SETTINGS))
        command = [ROOT / "target/release/underfoot", "identify", path, "--settings", settings]
        ours, theirs = [], []
        for _ in range(ROUNDS):
            start = time.perf_counter()
            answer = json.loads(subprocess.run(command, capture_output=True, check=True).stdout)
            ours.append(time.perf_counter() - start)
            start = time.perf_counter()
            k, _ = batch(stance)
            theirs.append(time.perf_counter() - start)
        seen = answer["soles"][0]["stances"][0]["parameters"][0]["value"]
    a, b = len(rows) / statistics.median(ours), len(stance) / statistics.median(theirs)
    print(f"{len(rows)} rows; k here {seen:.6g}, numpy {k:.6g} N/m^3")
    print(f"whole command, CSV to answer: {a:,.0f} samples/s")
    print(f"numpy batch from arrays:      {b:,.0f} samples/s; ratio {a / b:.2f}")


if __name__ == "__main__":
    main()
