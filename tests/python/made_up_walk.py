"""A made-up log: one sole stands twice, on different ground, with noise on the wrench. Invented data.

    .venv/bin/python tests/python/made_up_walk.py     writes schemas/example-identify.csv and its settings anew
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.spatial.transform import Rotation

from ground_reference import Bed

Array = np.ndarray
FOOT = [[-0.11, -0.05], [0.11, -0.05], [0.11, 0.05], [-0.11, 0.05]]
WEIGHT = 400.0
COLUMNS = (
    ["time [s]"]
    + [f"left.force.{a} [N]" for a in "xyz"]
    + [f"left.moment.{a} [N m]" for a in "xyz"]
    + [f"left.position.{a} [m]" for a in "xyz"]
    + [f"left.orientation.{a} [1]" for a in "xyzw"]
    + [f"left.linear_velocity.{a} [m/s]" for a in "xyz"]
    + [f"left.angular_velocity.{a} [rad/s]" for a in "xyz"]
)
SETTINGS = {"format": "underfoot/1", "soles": [{"name": "left", "vertices": FOOT}], "weight": WEIGHT}


@dataclass
class Patch:
    """Ground under one stance."""

    stiffness: float
    damping: float
    height: float

    def bed(self) -> Bed:
        k, b = self.stiffness, self.damping
        return Bed(np.array(FOOT), k, k, b, b, np.array([0.0, 0.0, self.height]), np.eye(3))


PATCHES = (Patch(3e6, 3e4, 0.0), Patch(9e5, 1.2e4, 0.012))


def motion(t: float, patch: Patch) -> tuple[Array, Rotation, Array, Array]:
    """Position, rotation, velocity and angular velocity at time t after touchdown: sinking, then bouncing, swaying, rocking."""
    sink = WEIGHT / (patch.stiffness * 0.022)
    late = max(t, 0.0)
    fall, rate = 1.0 - np.exp(-late / 0.03), np.exp(-late / 0.03) / 0.03

    def wave(amplitude: float, hertz: float) -> tuple[float, float]:
        w = 2 * np.pi * hertz
        return amplitude * np.sin(w * late), amplitude * w * np.cos(w * late)

    bounce, sway, roll, pitch = wave(0.05 * sink, 6.0), wave(0.08 * sink, 1.1), wave(0.006, 2.3), wave(0.004, 1.7)
    position = np.array([sway[0], 0.3 * sway[0], patch.height - sink * fall + bounce[0] * fall])
    velocity = np.array([sway[1], 0.3 * sway[1], -sink * rate + bounce[1] * fall + bounce[0] * rate])
    vector, vector_rate = np.array([roll[0], pitch[0], 0.0]), np.array([roll[1], pitch[1], 0.0])
    rotation = Rotation.from_rotvec(vector)
    step = 1e-6
    angular = (Rotation.from_rotvec(vector + step * vector_rate) * Rotation.from_rotvec(vector - step * vector_rate).inv()).as_rotvec() / (2 * step)
    if t < 0.0:
        position = position + velocity * t
        rotation = Rotation.from_rotvec(angular * t)
    return position, rotation, velocity, angular


def log(seed: int, step: float, stance: float, noise: tuple[float, float], patches=PATCHES) -> Array:
    """Rows in the order of COLUMNS, wrench in sole axes; 0.1 s in the air before each stance, 0.2 s of silence after it."""
    rng = np.random.default_rng(seed)
    rows, start = [], 0.0
    for patch in patches:
        bed = patch.bed()
        for t in np.arange(-0.1, stance, step):
            position, rotation, linear, angular = motion(t, patch)
            wrench = bed.wrench(position, rotation.as_matrix(), linear, angular) if t >= 0.0 else np.zeros(6)
            back = rotation.inv()
            force = back.apply(wrench[:3]) + noise[0] * rng.standard_normal(3)
            moment = back.apply(wrench[3:]) + noise[1] * rng.standard_normal(3)
            rows.append([start + 0.1 + t, *force, *moment, *position, *rotation.as_quat(), *linear, *angular])
        start += 0.3 + stance
    return np.array(rows)


def csv(rows: Array, columns=COLUMNS, digits: str = "%.9g") -> str:
    return "\n".join([",".join(columns), *(",".join(digits % x for x in row) for row in rows)]) + "\n"


def samples(rows: Array) -> list[dict]:
    """The same rows as JSON samples."""
    return [
        {
            "time": r[0],
            "soles": [
                {
                    "sole": "left", "force": list(r[1:4]), "moment": list(r[4:7]), "position": list(r[7:10]),
                    "orientation": list(r[10:14]), "linear_velocity": list(r[14:17]), "angular_velocity": list(r[17:20]),
                }
            ],
        }
        for r in rows.tolist()
    ]


def main() -> None:
    where = Path(__file__).parents[2] / "schemas"
    (where / "example-identify.csv").write_text(csv(log(1, 0.004, 1.0, (2.0, 0.1)), digits="%.7g"))
    (where / "example-identify.json").write_text(json.dumps(SETTINGS, indent=2) + "\n")


if __name__ == "__main__":
    main()
