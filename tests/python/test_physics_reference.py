"""The reference is checked itself before anything is held against it.

Source of the stored values, tests/data/biped7_check.json: derived (a Jacobian-sum code written for it, compared
with the physics engine), so this shows that the conversions into our convention are right. The identities by
finite differences below need no stored value.
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

import physics_reference as reference

DATA = Path(__file__).parents[1] / "data"


def relative(a, b) -> float:
    a, b = np.asarray(a, float), np.asarray(b, float)
    return float(np.abs(a - b).max() / max(1e-300, np.abs(b).max()))


@pytest.fixture(scope="module")
def check():
    return json.loads((DATA / "biped7_check.json").read_text())


def test_terms_of_the_oblique_biped(check):
    robot = reference.Robot((DATA / "biped7.urdf").read_text(), gravity=tuple(check["gravity"]))
    assert robot.joints == check["joint_order"]
    w, x, y, z = check["quat_wxyz"]
    joints = np.array([check["q"][n] for n in robot.joints])
    nu = np.concatenate([check["v_world"], check["w_world"], [check["qd"][n] for n in robot.joints]])
    robot.set(np.array(check["p"]), np.array([x, y, z, w]), joints, nu)
    terms = robot.terms()
    assert robot.mass == pytest.approx(check["mass"], rel=1e-12)
    assert relative(terms.mass_matrix, check["M_world_lin_world_ang"]) < 1e-11
    assert relative(terms.bias, check["bias_world"]) < 1e-9
    assert relative(terms.center_of_mass, check["com"]) < 1e-11
    assert relative(terms.center_of_mass_velocity, check["vcom"]) < 1e-11
    assert relative(terms.momentum[3:], check["L_com_world"]) < 1e-11
    assert terms.kinetic_energy == pytest.approx(check["kinetic"], rel=1e-11)
    assert terms.potential_energy == pytest.approx(check["potential"], rel=1e-11)


def advance(robot, state, step):
    """The state moved along its own velocity, by the exponential map."""
    nu = state.nu
    turn = nu[3:6] * step
    angle = np.linalg.norm(turn)
    half = np.array([*(turn / angle * np.sin(angle / 2)), np.cos(angle / 2)]) if angle > 0 else np.array([0, 0, 0, 1.0])
    ax, ay, az, aw = half
    bx, by, bz, bw = state.orientation
    q = np.array([
        aw * bx + ax * bw + ay * bz - az * by,
        aw * by - ax * bz + ay * bw + az * bx,
        aw * bz + ax * by - ay * bx + az * bw,
        aw * bw - ax * bx - ay * by - az * bz,
    ])
    return reference.Sample(state.position + step * nu[:3], q, state.joints + step * nu[6:], nu)


@pytest.mark.parametrize("seed", range(5))
def test_jacobian_rates_by_finite_differences(seed):
    """J_dot nu against the central difference of J nu along the motion, and kinetic energy = nu' M nu / 2."""
    rng = np.random.default_rng(seed)
    robot = reference.Robot(reference.random_urdf(rng, 12))
    state = reference.random_state(rng, len(robot.joints))
    point = rng.uniform(-0.1, 0.1, 3)

    def velocity(step):
        moved = advance(robot, state, step)
        robot.set(moved.position, moved.orientation, moved.joints, moved.nu)
        return robot.jacobian("link9", point) @ state.nu

    step = 1e-5
    difference = (velocity(step) - velocity(-step)) / (2 * step)
    robot.set(state.position, state.orientation, state.joints, state.nu)
    assert np.abs(robot.bias_acceleration("link9", point) - difference).max() < 1e-6 * max(1, np.abs(difference).max())
    terms = robot.terms()
    assert terms.kinetic_energy == pytest.approx(0.5 * state.nu @ terms.mass_matrix @ state.nu, rel=1e-11)
