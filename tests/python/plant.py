"""A robot on bonded ground under held torques, integrated finely: what one tick of the service is held against.

Mass matrix and bias come from the physics engine, the ground from quadrature; nothing of the service is used. State
(p, quaternion, q, nu): p_dot = v_B, quaternion_dot = (omega, 0) * quaternion / 2 (world axes), M nu_dot = S' tau - h + sum J' w.
"""

from __future__ import annotations

import numpy as np
from scipy.integrate import solve_ivp

from cases import Stance
from ground_reference import Bed
from physics_reference import Sample

Array = np.ndarray


def flat(state: Sample) -> Array:
    """The state as one vector."""
    return np.concatenate([state.position, state.orientation, state.joints, state.nu])


def unflat(y: Array, joints: int) -> Sample:
    """And back, the quaternion normalised."""
    return Sample(y[:3], y[3:7] / np.linalg.norm(y[3:7]), y[7 : 7 + joints], y[7 + joints :])


def wrenches(stance: Stance, beds: list[Bed], state: Sample) -> tuple[list[Array], list[Array]]:
    """Wrench on every sole in a state, and the soles' Jacobians."""
    here = Stance(stance.robot, state, stance.links, stance.points)
    found, jacobians = [], []
    for bed, (position, rotation, twist, jacobian, _) in zip(beds, here.soles()):
        found.append(bed.wrench(position, rotation, twist[:3], twist[3:]))
        jacobians.append(jacobian)
    return found, jacobians


def rate(stance: Stance, beds: list[Bed], torques: Array, y: Array) -> Array:
    """Time derivative of the state vector."""
    n = len(stance.state.joints)
    state = unflat(y, n)
    found, jacobians = wrenches(stance, beds, state)
    force = np.concatenate([np.zeros(6), torques]) - stance.robot.bias()
    for w, j in zip(found, jacobians):
        force = force + j.T @ w
    acceleration = np.linalg.solve(stance.robot.mass_matrix(), force)
    x, yy, z, w = state.orientation
    o = 0.5 * state.nu[3:6]
    turn = [
        o[0] * w + o[1] * z - o[2] * yy,
        o[1] * w + o[2] * x - o[0] * z,
        o[2] * w + o[0] * yy - o[1] * x,
        -(o[0] * x + o[1] * yy + o[2] * z),
    ]
    return np.concatenate([state.nu[:3], turn, state.nu[6:], acceleration])


def after(stance: Stance, beds: list[Bed], torques: Array, length: float) -> list[Array]:
    """Wrenches on the soles after `length` seconds under held torques (order 8, tolerance 1e-13)."""
    start = flat(stance.state)
    made = solve_ivp(lambda _, y: rate(stance, beds, torques, y), (0.0, length), start, method="DOP853", rtol=1e-13, atol=1e-14)
    assert made.success, made.message
    return wrenches(stance, beds, unflat(made.y[:, -1], len(stance.state.joints)))[0]
