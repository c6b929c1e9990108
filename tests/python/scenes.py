"""Solve requests for the walker that several live checks share."""

from __future__ import annotations

from typing import Any

import numpy as np
from underfoot import build, limits
from underfoot import tasks as aims

from cases import FOOT, Stance, walker_stance, walker_urdf

SOLES = ("left_sole", "right_sole")
GROUND = {"normal_stiffness": 2e6, "tangential_stiffness": 1.4e6, "normal_damping": 2e4, "tangential_damping": 1.2e4}
TICK = 0.005


def add_walker(client):
    """Registers the walker."""
    return client.add_model(walker_urdf(), soles=[build.sole(f"{s}_sole", f"{s}_foot", FOOT, position=[0, 0, -0.05]) for s in ("left", "right")])


def state_of(stance: Stance, change=None) -> dict[str, Any]:
    """The stance as the request's state."""
    s = stance.state
    nu = s.nu if change is None else s.nu + change
    return build.state(
        joints=(stance.robot.joints, s.joints, nu[6:]), base_position=s.position, base_orientation=s.orientation, base_velocity=nu[:6]
    )


def tasks(stance: Stance, second_rate: bool = True, levels: bool = False, effort: float = 1e-4) -> list[dict[str, Any]]:
    """Balance before posture before effort: in strict order, or all at priority 1 with weights (of effort: `effort`)."""
    names = stance.robot.joints
    stance.put()
    centre = stance.robot.terms().center_of_mass
    order = (1, 2, 3) if levels else (1, 1, 1)
    weights = (1.0, 1.0, 1.0) if levels else (1.0, 1e-2, effort)
    if second_rate:
        balance = aims.momentum_second_rate(
            "balance",
            center=centre + [0.01, 0.005, 0],
            position_gain=512.0,
            momentum_gain=(192.0, 200.0),
            rate_gain=(24.0, 30.0),
            scale=100.0,
            scale_angular=10.0,
            priority=order[0],
            weight=weights[0],
        )
    else:
        balance = aims.momentum_rate(
            "balance",
            center=centre + [0.01, 0.005, 0],
            position_gain=20.0,
            momentum_gain=(8.0, 8.0),
            scale=100.0,
            scale_angular=10.0,
            priority=order[0],
            weight=weights[0],
        )
    return [
        balance,
        aims.posture("posture", [(n, q) for n, q in zip(names, stance.state.joints)], gains=(100.0, 20.0), scale=10.0, priority=order[1], weight=weights[1]),
        aims.effort("effort", [(n, 0.0) for n in names], scale=50.0, priority=order[2], weight=weights[2]),
    ]


def standing(client, model, stance: Stance | None = None, *, ground=None, facets=None, levels=False, second_rate=True, length=TICK, rule="backward_euler", friction=0.6, state=None, effort=1e-4, include=()) -> dict[str, Any]:
    """The walker on two feet. `ground`: from sole position and share of the weight to members of the contact."""
    stance = stance or walker_stance()
    stance.put()
    weight = stance.robot.mass * 9.80665

    def carrying(position, load):
        return {"law": build.bonded(**GROUND), "rest": build.rest_carries([0, 0, load])}

    ground = ground or carrying
    return build.request(
        model=model,
        state=state or state_of(stance),
        tick=build.tick(length, rule),
        contacts=[
            build.contact(
                name,
                **ground(sole[0], weight / 2),
                friction=build.friction("wrench" if facets == "wrench" else "vertex", friction, facets=None if facets == "wrench" else facets, torsion=0.03 if facets == "wrench" else None),
                normal_force=build.normal_force(least=5.0),
            )
            for name, sole in zip(SOLES, stance.soles())
        ],
        limits=[limits.torque([(n, 150.0) for n in stance.robot.joints])],
        tasks=tasks(stance, second_rate, levels, effort),
        include=list(include),
    )
