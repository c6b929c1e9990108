"""Robots and states that the live checks share. All of it is invented for the tests."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

import physics_reference as reference

Array = np.ndarray
ROOT = Path(__file__).parents[2]
FOOT = np.array([[-0.08, -0.05], [0.12, -0.05], [0.12, 0.05], [-0.08, 0.05]])
"""Sole polygon of the walker (m), counter-clockwise."""
DROP = 0.05
"""Height of the ankle above the sole (m)."""


def box(name: str, mass: float, size: tuple[float, float, float], centre: tuple[float, float, float]) -> str:
    x, y, z = (s * s for s in size)
    i = [mass / 12 * v for v in (y + z, x + z, x + y)]
    return (
        f'<link name="{name}"><inertial><origin xyz="{centre[0]} {centre[1]} {centre[2]}" rpy="0 0 0"/><mass value="{mass}"/>'
        f'<inertia ixx="{i[0]!r}" iyy="{i[1]!r}" izz="{i[2]!r}" ixy="0" ixz="0" iyz="0"/></inertial></link>'
    )


def turning(name: str, parent: str, child: str, at: tuple[float, float, float], axis: str, effort: float) -> str:
    axis = {"x": "1 0 0", "y": "0 1 0", "z": "0 0 1"}[axis]
    return (
        f'<joint name="{name}" type="revolute"><parent link="{parent}"/><child link="{child}"/><origin xyz="{at[0]} {at[1]} {at[2]}" rpy="0 0 0"/>'
        f'<axis xyz="{axis}"/><limit lower="-2.6" upper="2.6" effort="{effort}" velocity="20"/></joint>'
    )


def walker_urdf() -> str:
    """A biped of 18 joints: six a leg, three an arm; 39 kg or so."""
    parts = [box("pelvis", 15.0, (0.2, 0.3, 0.5), (0.0, 0.0, 0.22))]
    for side, s in (("left", 1.0), ("right", -1.0)):
        chain = [
            ("hip_yaw", "z", (0, 0.09 * s, -0.05), box(f"{side}_hip", 0.9, (0.08, 0.08, 0.08), (0, 0, -0.02)), 120),
            ("hip_roll", "x", (0, 0, -0.03), box(f"{side}_hip_block", 0.9, (0.08, 0.08, 0.08), (0.01, 0, 0)), 150),
            ("hip_pitch", "y", (0, 0, 0), box(f"{side}_thigh", 4.0, (0.12, 0.11, 0.34), (0.01, 0.005 * s, -0.17)), 150),
            ("knee", "y", (0, 0, -0.36), box(f"{side}_shank", 2.5, (0.09, 0.09, 0.32), (0.01, 0, -0.16)), 200),
            ("ankle_pitch", "y", (0, 0, -0.34), box(f"{side}_ankle", 0.3, (0.05, 0.05, 0.05), (0, 0, 0)), 120),
            ("ankle_roll", "x", (0, 0, 0), box(f"{side}_foot", 1.1, (0.2, 0.09, 0.04), (0.02, 0, -0.03)), 90),
        ]
        parent = "pelvis"
        for joint, axis, at, link, effort in chain:
            child = link.split('"')[1]
            parts += [link, turning(f"{side}_{joint}", parent, child, at, axis, effort)]
            parent = child
        arm = [
            ("shoulder_pitch", "y", (0, 0.2 * s, 0.4), box(f"{side}_shoulder", 0.6, (0.08, 0.08, 0.08), (0, 0.02 * s, 0)), 60),
            ("shoulder_roll", "x", (0, 0.04 * s, 0), box(f"{side}_upper_arm", 1.2, (0.07, 0.07, 0.25), (0, 0, -0.12)), 60),
            ("elbow", "y", (0, 0, -0.25), box(f"{side}_forearm", 0.9, (0.06, 0.06, 0.25), (0, 0, -0.12)), 40),
        ]
        parent = "pelvis"
        for joint, axis, at, link, effort in arm:
            child = link.split('"')[1]
            parts += [link, turning(f"{side}_{joint}", parent, child, at, axis, effort)]
            parent = child
    return '<?xml version="1.0"?>\n<robot name="walker">\n' + "\n".join(parts) + "\n</robot>\n"


def block_urdf(mass: float = 30.0) -> str:
    """One rigid block, no joints; its frame lies at the centre of its bottom."""
    return f'<?xml version="1.0"?>\n<robot name="block">{box("block", mass, (0.3, 0.2, 0.4), (0.0, 0.0, 0.2))}</robot>\n'


@dataclass(frozen=True)
class Stance:
    """A state of a robot in the reference and the motion of its soles there."""

    robot: reference.Robot
    state: reference.Sample
    links: tuple[str, ...]
    points: tuple[Array, ...]

    def put(self) -> None:
        """Puts the reference into this state."""
        self.robot.set(self.state.position, self.state.orientation, self.state.joints, self.state.nu)

    def soles(self) -> list[tuple[Array, Array, Array, Array, Array]]:
        """Position, rotation, twist, Jacobian, bias acceleration of every sole (axes parallel to the link's)."""
        self.put()
        out = []
        for link, point in zip(self.links, self.points):
            p, r = self.robot.pose(link)
            j = self.robot.jacobian(link, point)
            out.append((p + r @ point, r, j @ self.state.nu, j, self.robot.bias_acceleration(link, point)))
        return out


def walker_stance(rng: np.random.Generator | None = None, speed: float = 0.0, spread: float = 0.0) -> Stance:
    """The walker on bent knees with its soles at z = 0; `spread` (rad) and `speed` (m/s, rad/s) add random parts."""
    robot = reference.Robot(walker_urdf())
    joints = np.zeros(len(robot.joints))
    bend = {"hip_pitch": -0.35, "knee": 0.7, "ankle_pitch": -0.35, "shoulder_roll": 0.0, "elbow": -0.4}
    for i, name in enumerate(robot.joints):
        joints[i] = bend.get(name.split("_", 1)[1], 0.0)
    nu = np.zeros(6 + len(joints))
    if rng is not None:
        joints = joints + spread * rng.uniform(-1, 1, len(joints))
        nu = speed * rng.uniform(-1, 1, len(nu))
    point = np.array([0.0, 0.0, -DROP])
    state = reference.Sample(np.zeros(3), np.array([0, 0, 0, 1.0]), joints, nu)
    made = Stance(robot, state, ("left_foot", "right_foot"), (point, point))
    height = min(sole[0][2] for sole in made.soles())
    return Stance(robot, reference.Sample(np.array([0, 0, -height]), state.orientation, joints, nu), made.links, made.points)
