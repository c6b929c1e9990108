"""Random feasible states of the walker, good answers to them, and answers with one fault each.

The good answers, and those with a fault in the question, come from general-purpose solvers on the exported problem (`hierarchy`), not
from the service's own solver. Faults are made in the JSON request or in the torques, the way a controller would make them.
"""

from __future__ import annotations

import copy
import math
from dataclasses import dataclass, replace
from typing import Any

import hierarchy
import numpy as np
import physics_reference as reference
from cases import FOOT, Stance, walker_stance, walker_urdf
from scenes import GROUND, SOLES, state_of
from test_optimum import exported
from underfoot import Refused, build, limits
from underfoot import tasks as aims

Array = np.ndarray
WEIGHT = 9.80665
FRICTION = 0.6
SETTLED = 1e-7
"""Optimality conditions of a checker's answer, and the agreement of two of its runs (relative torque), needed to call it good."""


class NoAnswer(Exception):
    """The question has no answer, or none the checker is sure of."""


@dataclass(frozen=True)
class Models:
    """The walker with rotor inertia, and as a controller sees it that forgets it."""

    full: Any
    bare: Any

    @staticmethod
    def register(client) -> Models:
        soles = [build.sole(f"{s}_sole", f"{s}_foot", FOOT, position=[0, 0, -0.05]) for s in ("left", "right")]
        robot = reference.Robot(walker_urdf())
        rotors = [build.joint(name, rotor_inertia=0.08 if "knee" in name or "hip" in name else 0.04) for name in robot.joints]
        return Models(client.add_model(walker_urdf(), soles=soles, joints=rotors), client.add_model(walker_urdf(), soles=soles))


def turned(stance: Stance, q: Array) -> Stance:
    """The stance about its base, turned by a quaternion; velocities turn with it."""
    s = stance.state
    r = reference.quaternion_matrix(q)
    nu = s.nu.copy()
    nu[:3], nu[3:6] = r @ nu[:3], r @ nu[3:6]
    return Stance(stance.robot, reference.Sample(s.position, q, s.joints, nu), stance.links, stance.points)


def times(a: Array, b: Array) -> Array:
    """Product of two quaternions [x, y, z, w]."""
    v = a[3] * b[:3] + b[3] * a[:3] + np.cross(a[:3], b[:3])
    return np.append(v, a[3] * b[3] - a[:3] @ b[:3])


def about(vector: Array) -> Array:
    """Quaternion of a rotation vector."""
    angle = np.linalg.norm(vector)
    axis = vector / angle if angle > 0 else np.zeros(3)
    return np.append(math.sin(angle / 2) * axis, math.cos(angle / 2))


def draw(rng: np.random.Generator, models: Models, number: int) -> tuple[dict[str, Any], Stance]:
    """A request: heading anywhere, a little tilted, in motion, feet pressed against each other near the friction limit."""
    stance = walker_stance(rng, speed=0.3, spread=0.15)
    stance = turned(stance, times(about([0, 0, rng.uniform(-np.pi, np.pi)]), about(rng.uniform(-0.05, 0.05, 3))))
    soles = stance.soles()
    across = soles[1][0] - soles[0][0]
    across[2] = 0
    across /= np.linalg.norm(across)
    weight = stance.robot.mass * WEIGHT
    share = rng.uniform(0.42, 0.58)
    softness = 10 ** rng.uniform(-0.5, 0.7)
    law = {name: value * softness for name, value in GROUND.items()}
    outward = rng.choice([-1.0, 1.0])
    pressed, wanted = rng.uniform(0.48, 0.58), rng.uniform(0.7, 1.0)
    contacts, tasks = [], []
    for side, (name, sole, load) in enumerate(zip(SOLES, soles, (share * weight, (1 - share) * weight))):
        sense = outward * (1 if side == 0 else -1)
        center = sole[1] @ np.array([rng.uniform(-0.02, 0.05), rng.uniform(-0.015, 0.015), 0.0])
        force = np.array([0, 0, load]) + sense * pressed * load * across
        contacts.append(
            build.contact(
                name,
                build.bonded(**law),
                measured=np.append(force, np.cross(center, force)),
                friction=build.friction("vertex", FRICTION, facets=8),
                normal_force=build.normal_force(least=5.0),
            )
        )
        goal = np.array([0, 0, weight / 2]) + sense * wanted * weight / 2 * across
        tasks.append(aims.wrench(f"load {name}", name, np.append(goal, np.zeros(3)), approach=30.0, scale=10.0, priority=2))
    stance.put()
    center = stance.robot.terms().center_of_mass + rng.uniform(-0.01, 0.01, 3)
    names = stance.robot.joints
    balance = aims.momentum_second_rate(
        "balance", center=center, position_gain=512.0, momentum_gain=(192.0, 200.0), rate_gain=(24.0, 30.0), scale=100.0,
        scale_angular=10.0, priority=1,
    )
    posture = aims.posture(
        "posture", [(n, q + rng.uniform(-0.05, 0.05)) for n, q in zip(names, stance.state.joints)], gains=(100.0, 20.0), scale=10.0, priority=3
    )
    request = build.request(
        model=models.full.id,
        state=state_of(stance),
        tick=build.tick(0.005, "held" if number % 2 else "backward_euler"),
        gravity=[0, 0, -WEIGHT],
        contacts=contacts,
        limits=[limits.torque([(n, 200.0) for n in names], name="torque")],
        tasks=[balance, *tasks, posture, aims.effort("effort", [(n, 0.0) for n in names], scale=50.0, priority=4)],
    )
    return request, stance


@dataclass(frozen=True)
class Good:
    """A checker's answer."""

    torques: dict[str, float]
    values: dict[str, float]
    """Every unknown by name, physical."""
    touching: tuple[str, ...]
    """Limits without room."""


def solve(client, request: dict[str, Any], twice: bool = True) -> Good:
    """The optimum of the exported problem by the active-set solver; `NoAnswer` where it has none, or where its optimality conditions
    do not hold or (`twice`) two runs of it differ."""
    try:
        answer = client.solve({**request, "include": ["problem"]})
    except Refused as refused:
        raise NoAnswer(f"refused, {refused.code}") from refused
    document = answer.document.get("problem")
    if document is None or answer.status in ("infeasible", "not_reachable"):
        raise NoAnswer(answer.status)
    problem = exported(document)
    try:
        # Limits that bind almost everywhere leave the solver's lower priorities to chance: then two runs tell.
        outcome = hierarchy.solve(problem, "active set", (1e-6, 1e-8) if twice else (1e-6,))
        again = hierarchy.solve(problem, "active set", (1e-7,)) if twice else outcome
    except (AssertionError, ValueError, np.linalg.LinAlgError) as error:
        raise NoAnswer(f"checker: {error}") from error
    values = dict(zip(problem.names, outcome.x * problem.scale))
    other = dict(zip(problem.names, again.x * problem.scale))
    torques = {name[7:]: value for name, value in values.items() if name.startswith("torque:")}
    largest = max(1.0, max(abs(t) for t in torques.values()))
    spread = max(abs(torques[n] - other[f"torque:{n}"]) for n in torques) / largest
    if max(outcome.residual, again.residual) > SETTLED or not spread <= SETTLED:
        raise NoAnswer(f"checker unsure: {outcome.residual:.1e}, {again.residual:.1e}, {spread:.1e}")
    slack = problem.hard.b - problem.hard.a @ outcome.x
    names = document["hard"]["names"]
    touching = []
    at = 0
    for kind, size in problem.hard.cones:
        if kind == "nonnegative":
            touching += [names[i]["group"] for i in range(at, at + size) if slack[i] < 1e-7]
        at += size
    return Good(torques, values, tuple(dict.fromkeys(touching)))


def with_torque_limit(rng: np.random.Generator, client, request: dict[str, Any]) -> dict[str, Any]:
    """One joint's torque bound set a little below what it would take; whichever joint it falls on."""
    try:
        free = client.solve(request)
    except Refused as refused:
        raise NoAnswer(f"refused, {refused.code}") from refused
    if free.torques is None:
        raise NoAnswer(free.status)
    large = [i for i, t in enumerate(free.torques) if abs(t) > 2.0]
    chosen = int(rng.choice(large))
    out = copy.deepcopy(request)
    entry = out["limits"][0]["joints"][chosen]
    entry["bound"] = float(abs(free.torques[chosen]) * rng.uniform(0.93, 0.995))
    return out


# Faults. Each returns the mistaken question, or the mistaken torques.


def gravity(rng, request):
    out = copy.deepcopy(request)
    out["gravity"][2] *= rng.choice([0.98, 1.02])
    return out


def friction(rng, request):
    out = copy.deepcopy(request)
    for contact in out["contacts"]:
        contact["friction"]["coefficient"] = 0.7
    return out


def ignoring(request, group: str):
    out = copy.deepcopy(request)
    out["limits"] = [limit for limit in out["limits"] if limit["name"] != group]
    for contact in out["contacts"]:
        for member in ("friction", "normal_force"):
            if group == f"{member}:{contact['sole']}":
                contact.pop(member)
    return out


def priorities(rng, request):
    out = copy.deepcopy(request)
    for task in out["tasks"]:
        task["priority"] = 5 - task["priority"]
    return out


def stiffness(rng, request):
    out = copy.deepcopy(request)
    factor = rng.choice([0.8, 1.2])
    for contact in out["contacts"]:
        contact["law"]["stiffness"] = {part: value * factor for part, value in contact["law"]["stiffness"].items()}
    return out


def velocity_axes(rng, request):
    out = copy.deepcopy(request)
    which = int(rng.integers(3))
    out["state"]["velocity_axes"] = {"linear": "world" if which == 1 else "base", "angular": "world" if which == 0 else "base"}
    return out


def quaternion(rng, request):
    out = copy.deepcopy(request)
    q = out["state"]["base"]["orientation"]
    out["state"]["base"]["orientation"] = [*q[1:], q[0]]
    return out


def rotor_inertia(models: Models, request):
    return {**copy.deepcopy(request), "model": models.bare.id}


def next_tick(request: dict[str, Any], stance: Stance, good: Good) -> dict[str, Any]:
    """The question one tick on: the state carried on under the good answer's accelerations, the soles measuring its wrenches."""
    length = request["tick"]["length"]
    s = stance.state
    names = [f"base:{part}" for part in ("vx", "vy", "vz", "wx", "wy", "wz")] + stance.robot.joints
    a = np.array([good.values[f"acceleration:{name}"] for name in names])
    step = s.nu * length + a * length**2 / 2
    state = reference.Sample(s.position + step[:3], times(about(step[3:6]), s.orientation), s.joints + step[6:], s.nu + a * length)
    out = copy.deepcopy(request)
    out["state"] = state_of(replace(stance, state=state))
    for contact in out["contacts"]:
        parts = [good.values[f"wrench:{contact['sole']}:{part}"] for part in ("fx", "fy", "fz", "mx", "my", "mz")]
        contact["measured_wrench"] = {"force": parts[:3], "moment": parts[3:]}
    return out
