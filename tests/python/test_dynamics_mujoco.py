"""Rigid-body terms of POST /v1/dynamics against a general-purpose physics engine (PyPI `mujoco` 4.0), live.

Every figure is relative to the largest entry of the engine's. Random states cover any base orientation; three robots.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from underfoot import build

import physics_reference as reference
from cases import ROOT

BOUND = 1e-9
FLOOR = 1e-3  # where the engine's figure itself vanishes, e.g. J_dot nu of links welded to a fixed base
STATES = 100
pytestmark = pytest.mark.campaign


def urdf(name: str) -> str:
    if name == "random":
        return reference.random_urdf(np.random.default_rng(20), 40)
    path = {"demo": ROOT / "src" / "cli" / "demo" / "biped.urdf", "biped7": ROOT / "tests" / "data" / "biped7.urdf"}[name]
    return Path(path).read_text()


def worst(found, expected) -> float:
    expected = np.asarray(expected, float)
    return float(np.abs(np.asarray(found, float) - expected).max() / max(FLOOR, np.abs(expected).max()))


@pytest.mark.parametrize("axes", ["world", "base"])
@pytest.mark.parametrize("base", ["floating", "fixed"])
@pytest.mark.parametrize("name", ["demo", "biped7", "random"])
def test_terms(client, rng, factor, row, name, base, axes):
    if base == "fixed" and axes == "base":
        pytest.skip("a fixed base has no velocity")
    text = urdf(name)
    fixed = base == "fixed"
    robot = reference.Robot(text, fixed_base=fixed)
    model = client.add_model(text, fixed_base=fixed)
    assert list(model.joints) == robot.joints
    assert model.mass == pytest.approx(robot.mass, rel=1e-12)
    bodies = [robot.model.body(i).name for i in range(1, robot.model.nbody)]
    figures: dict[str, float] = {}
    count = (STATES if not fixed and axes == "world" else 20) * factor
    for _ in range(count):
        state = reference.random_state(rng, len(robot.joints))
        nu = state.nu[6:] if fixed else state.nu
        robot.set(state.position, state.orientation, state.joints, nu)
        links = list(rng.choice(bodies, size=min(4, len(bodies)), replace=False))
        turn = reference.quaternion_matrix(state.orientation)
        given = nu.copy()
        # Columns of the request's axes: nu_world = change @ nu_request.
        change = np.eye(len(nu))
        if axes == "base":
            change[:3, :3] = change[3:6, 3:6] = turn
            given = change.T @ nu
        document = build.state(
            joints=(robot.joints, state.joints, given if fixed else given[6:]),
            base_position=state.position,
            base_orientation=state.orientation,
            base_velocity=None if fixed else given[:6],
            velocity_axes=axes,
        )
        found = client.dynamics(model, document, frames=links)
        terms = robot.terms()
        pairs = {
            "centre of mass": (found.center_of_mass, terms.center_of_mass),
            "centre of mass velocity": (found.center_of_mass_velocity, terms.center_of_mass_velocity),
            "momentum": (found.momentum, terms.momentum),
            "momentum matrix times velocity": (found.momentum_matrix @ given, terms.momentum),
            "kinetic energy": (found.kinetic_energy, terms.kinetic_energy),
            "potential energy": (found.potential_energy, terms.potential_energy),
        }
        # Base axes rotate, so accelerations differ by omega x v there: M and J turn, the bias terms gain M change_dot nu.
        rate = np.zeros(len(nu))
        if axes == "base":
            rate[:3] = np.cross(nu[3:6], nu[:3])
        pairs["mass matrix"] = (found.mass_matrix, change.T @ terms.mass_matrix @ change)
        pairs["bias"] = (found.bias, change.T @ (terms.bias + terms.mass_matrix @ rate))
        if not fixed:
            # Base rows of M nu_dot + h are force and moment about the base origin: hence the centroidal momentum
            # matrix and its rate term (gravity has no moment about the centre of mass).
            arm = terms.center_of_mass - state.position
            cross = np.array([[0, -arm[2], arm[1]], [arm[2], 0, -arm[0]], [-arm[1], arm[0], 0]])
            a = np.vstack([terms.mass_matrix[:3], terms.mass_matrix[3:6] - cross @ terms.mass_matrix[:3]])
            a_dot = np.concatenate([terms.bias[:3] + robot.mass * robot.model.opt.gravity, terms.bias[3:6] - cross @ terms.bias[:3]])
            pairs["momentum matrix"] = (found.momentum_matrix, a @ change)
            pairs["momentum bias"] = (found.momentum_bias, a_dot + a @ rate)
        jacobians, biases = [], []
        for link in links:
            frame = found.frame(link)
            position, rotation = robot.pose(link)
            j = robot.jacobian(link)
            jacobians.append((frame.jacobian, j @ change))
            biases.append((frame.bias_acceleration, robot.bias_acceleration(link) + j @ rate))
            pairs[f"position of {link}"] = (frame.position, position)
            pairs[f"orientation of {link}"] = (reference.quaternion_matrix(frame.orientation), rotation)
        pairs["Jacobians"] = tuple(np.vstack(part) for part in zip(*jacobians))
        pairs["J_dot nu"] = tuple(np.concatenate(part) for part in zip(*biases))
        for key, (ours, theirs) in pairs.items():
            key = key.split(" of ")[0] if key.startswith(("position", "orientation")) else key
            figures[key] = max(figures.get(key, 0.0), worst(ours, theirs))
    row(f"dynamics of {name}, {base} base, {axes} axes, {count} states: largest relative difference", f"{max(figures.values()):.1e}")
    assert max(figures.values()) < BOUND, figures


def test_rotor_inertia_and_friction(client, rng):
    """Rotor inertia stands on the diagonal of M (the engine calls it armature); friction is reported beside the bias."""
    text = urdf("biped7")
    robot = reference.Robot(text, rotor_inertia={"r_knee": 0.7})
    model = client.add_model(text, joints=[build.joint("r_knee", rotor_inertia=0.7, viscous_friction=2.0, coulomb_friction=0.5)])
    state = reference.random_state(rng, len(robot.joints))
    robot.set(state.position, state.orientation, state.joints, state.nu)
    found = client.dynamics(
        model,
        build.state(
            joints=(robot.joints, state.joints, state.nu[6:]),
            base_position=state.position,
            base_orientation=state.orientation,
            base_velocity=state.nu[:6],
        ),
    )
    assert worst(found.mass_matrix, robot.mass_matrix()) < BOUND
    assert worst(found.bias, robot.bias()) < BOUND
    speed = state.nu[6 + robot.joints.index("r_knee")]
    expected = np.zeros(6 + len(robot.joints))
    expected[6 + robot.joints.index("r_knee")] = 2.0 * speed + 0.5 * np.sign(speed)
    # The sign is a convention of the report; what counts is that friction opposes the motion by this much.
    assert worst(np.abs(found.friction), np.abs(expected)) < BOUND
