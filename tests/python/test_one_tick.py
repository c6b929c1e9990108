"""The predicted wrench at the tick's end against a fine integration of the same robot on the same ground.

Source: derived. Backward and forward Euler and any rule that freezes the robot's matrices are of second order over one
tick, so halving T divides the error by 4; the trapezoid on a body that starts without rotation is of third order: 8.
Both hold once T is short beside the fastest mode of the robot on its bed, T < 0.2 / omega_max.
"""

from __future__ import annotations

import numpy as np
import pytest
from underfoot import build
from underfoot import tasks as aims

import plant
from cases import FOOT, Stance, block_urdf, walker_stance, walker_urdf
from ground_reference import Bed
from physics_reference import Robot, Sample

pytestmark = pytest.mark.campaign
GROUND = {"normal_stiffness": 2e6, "tangential_stiffness": 1.4e6, "normal_damping": 2e4, "tangential_damping": 1.2e4}
BLOCK_SOLE = np.array([[-0.11, -0.05], [0.11, -0.05], [0.11, 0.05], [-0.11, 0.05]])
NEAR, SECOND = 3.0, 3.8  # least factor per halving from T = 0.2 / omega_max on (order 1.6), and of the last; 4 in the limit
ARM = 0.05  # m: puts moments beside forces in one norm


def predicted(client, model, stance, rests, polygon_names, torques, length, rule):
    """Asks the service for the wrench at the tick's end with the torques prescribed."""
    robot = stance.robot
    state = stance.state
    tasks = [aims.effort("given torques", [(n, t) for n, t in zip(robot.joints, torques)], must_hold=True)] if robot.joints else []
    answer = client.solve(
        build.request(
            model=model,
            state=build.state(
                joints=(robot.joints, state.joints, state.nu[6:]),
                base_position=state.position,
                base_orientation=state.orientation,
                base_velocity=state.nu[:6],
            ),
            tick=build.tick(length, rule),
            contacts=[
                build.contact(name, build.bonded(**GROUND), rest=build.rest_pose(position))
                for name, position in zip(polygon_names, rests)
            ],
            tasks=tasks,
        )
    )
    assert answer.solved, answer.document
    if len(torques):
        assert np.abs(answer.torques - torques).max() < 1e-8 * max(1.0, np.abs(torques).max())
    return [answer.sole(n).wrench for n in polygon_names], answer


def ratios(client, model, stance, rests, names, polygon, torques, rule, start, halvings):
    """Errors at start, start/2, ... and the factor by which each halving divides them."""
    beds = [Bed(polygon, **GROUND, rest_position=np.array(r), rest_rotation=np.eye(3)) for r in rests]
    errors = []
    for k in range(halvings + 1):
        length = start / 2**k
        found, _ = predicted(client, model, stance, rests, names, torques, length, rule)
        true = plant.after(stance, beds, torques, length)
        difference = np.concatenate(found) - np.concatenate(true)
        difference.reshape(-1, 6)[:, 3:] /= ARM
        errors.append(float(np.linalg.norm(difference)))
    return errors, [a / b for a, b in zip(errors, errors[1:])]


@pytest.fixture(scope="module")
def walker(client):
    return client.add_model(walker_urdf(), soles=[build.sole(f"{s}_sole", f"{s}_foot", FOOT, position=[0, 0, -0.05]) for s in ("left", "right")])


def omega_max(answer) -> float:
    return answer.document["ground"]["omega_max"]


@pytest.mark.parametrize("rule", ["backward_euler", "trapezoid", "explicit"])
def test_second_order_on_two_feet(client, walker, rng, factor, row, rule):
    names = ["left_sole", "right_sole"]
    worst = []
    for _ in range(2 * factor):
        stance = walker_stance(rng, speed=0.1, spread=0.15)
        rests = [position + np.array([0.0005, -0.0003, 0.004]) for position, *_ in stance.soles()]
        torques = rng.uniform(-15, 15, len(stance.robot.joints))
        _, answer = predicted(client, walker, stance, rests, names, torques, 1e-4, rule)
        errors, found = ratios(client, walker, stance, rests, names, FOOT, torques, rule, 0.2 / omega_max(answer), 5)
        # No slower than T^2; where the T^2 part is small, the T^3 part still shows.
        assert min(found) > NEAR and found[-1] > SECOND, (errors, found)
        worst.append(found[-1])
    row(f"one tick, walker, {rule}: a halving of T divides the error by", f"{min(worst):.2f} to {max(worst):.2f} (4 in the limit)")


def block_stance(linear, angular):
    robot = Robot(block_urdf())
    point = np.zeros(3)
    state = Sample(np.zeros(3), np.array([0, 0, 0, 1.0]), np.zeros(0), np.array([*linear, *angular], float))
    return Stance(robot, state, ("block",), (point,))


@pytest.mark.parametrize(("rule", "angular", "order"), [("trapezoid", (0, 0, 0), 3), ("trapezoid", (0.4, -0.3, 0.5), 2), ("backward_euler", (0, 0, 0), 2)])
def test_single_body_on_the_bed(client, row, rule, angular, order):
    model = client.add_model(block_urdf(), soles=[build.sole("bottom", "block", BLOCK_SOLE)])
    stance = block_stance((0.05, -0.03, -0.2), angular)
    rests = [np.array([0.001, -0.0005, 0.003])]
    _, answer = predicted(client, model, stance, rests, ["bottom"], np.zeros(0), 1e-4, rule)
    start = 0.2 / omega_max(answer)
    errors, found = ratios(client, model, stance, rests, ["bottom"], BLOCK_SOLE, np.zeros(0), rule, start, 4)
    near, last = {2: (NEAR, SECOND), 3: (7.0, 7.8)}[order]
    row(f"one tick, single body, {rule}, rotating {any(angular)}: a halving of T divides the error by", f"{found[-1]:.2f} ({2**order} in the limit)")
    assert min(found) > near and found[-1] > last, (errors, found)
