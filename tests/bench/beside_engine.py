"""Rigid-body terms beside a physics engine's forward pass on the same tree of 36 degrees of freedom, in one run.

    .venv/bin/python tests/bench/beside_engine.py

Ours: mass matrix, bias, momentum (`cargo bench --bench dynamics`). The engine's: `mj_forward`, which also factorises the mass matrix
and solves for accelerations, called from Python, whose call costs about a microsecond. They take turns; medians are printed.
"""

import pathlib
import statistics
import subprocess
import sys
import tempfile
import time

import mujoco

sys.path.insert(0, str(pathlib.Path(__file__).parents[1] / "python"))
import physics_reference  # noqa: E402

ROUNDS = 5


def ours(path):
    command = ["cargo", "bench", "--locked", "--bench", "dynamics", "--", str(path)]
    line = subprocess.run(command, check=True, capture_output=True, text=True).stdout.strip().splitlines()[-1]
    return float(line.split()[-2])


def engines(model):
    data = mujoco.MjData(model)
    data.qvel[:] = 0.1
    mujoco.mj_forward(model, data)
    times = []
    for _ in range(2000):
        start = time.perf_counter()
        mujoco.mj_forward(model, data)
        times.append(time.perf_counter() - start)
    return 1e6 * statistics.median(times)


def main():
    path = pathlib.Path(tempfile.mkdtemp()) / "tree.urdf"
    ours(path)
    model = physics_reference.Robot(path.read_text()).model
    rounds = [(ours(path), engines(model)) for _ in range(ROUNDS)]
    our, engine = (statistics.median(r) for r in zip(*rounds))
    print(f"dynamics terms {our:.1f} us, engine's forward pass {engine:.1f} us ({model.nv} degrees of freedom): ratio {our / engine:.2f}")


if __name__ == "__main__":
    main()
