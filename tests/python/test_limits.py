"""What the answer must tend to where the ground tends to something known, and what must not change it.

Source: derived. A bed of stiffness k prescribes the sole's acceleration up to terms of order 1/k.
"""

from __future__ import annotations

import concurrent.futures

import numpy as np
import pytest
from underfoot import build

import scenes
from cases import walker_stance

pytestmark = pytest.mark.campaign
DECADES = (1e9, 1e10, 1e11, 1e12, 1e13)
EFFORT = 1.0  # weight: the sharing of the load between the feet must not hang on a hair, or 1/k shows late


@pytest.fixture(scope="module")
def walker(client):
    return scenes.add_walker(client)


def amounts(answer):
    return np.concatenate([answer.torques, *(s.wrench for s in answer.soles)])


def stiff(k):
    def ground(position, load):
        return {"law": build.bonded(normal_stiffness=k, normal_damping=0.01 * k), "rest": build.rest_carries([0, 0, load])}

    return ground


def gaps(client, walker, stance, rigid):
    reference = client.solve(scenes.standing(client, walker, stance, ground=lambda p, load: {"law": rigid}, second_rate=False, effort=EFFORT))
    assert reference.solved, reference.document
    out = []
    for k in DECADES:
        soft = client.solve(scenes.standing(client, walker, stance, ground=stiff(k), second_rate=False, effort=EFFORT))
        assert soft.solved, (k, soft.document)
        out.append(float(np.abs(amounts(soft) - amounts(reference)).max()))
    return out, float(np.abs(amounts(reference)).max())


def test_stiff_ground_is_rigid_ground(client, walker, row):
    """Soles at rest: the gap to the rigid answer falls as 1/k."""
    found, size = gaps(client, walker, walker_stance(), build.rigid())
    row("k = 1e9, 1e10, 1e11, 1e12, 1e13 N/m^3 against rigid, largest difference (N, N m)", ", ".join(f"{g:.1e}" for g in found))
    assert found[-1] < 1e-6 * size, found
    assert all(b < 0.15 * a for a, b in zip(found, found[1:])), found


def test_stiff_ground_in_motion_is_the_stop(client, walker, row):
    """Soles that translate: the tick ends with them at rest, as `stop` prescribes."""
    stance = walker_stance()
    nu = np.zeros(6 + len(stance.robot.joints))
    nu[:3] = [0.02, -0.01, -0.03]
    moving = type(stance)(stance.robot, type(stance.state)(stance.state.position, stance.state.orientation, stance.state.joints, nu), stance.links, stance.points)
    found, size = gaps(client, walker, moving, build.rigid(stop=True))
    row("the same in motion against `stop`", ", ".join(f"{g:.1e}" for g in found))
    assert found[-1] < 1e-5 * size, found
    assert all(b < 0.15 * a for a, b in zip(found, found[1:])), found


def test_a_measured_wrench_equal_to_the_modelled_one_changes_nothing(client, walker, rng):
    stance = walker_stance(rng, speed=0.05, spread=0.05)
    def pose(position, load):
        return {"law": build.bonded(**scenes.GROUND), "rest": build.rest_pose(position + [0.0, 0.0, 0.005])}

    first = client.solve(scenes.standing(client, walker, stance, ground=pose))
    assert first.torques is not None, first.document
    measured = iter([s.present for s in first.soles])

    def told(position, load):
        return {**pose(position, load), "measured": next(measured)}

    second = client.solve(scenes.standing(client, walker, stance, ground=told))
    assert second.status == first.status
    assert np.abs(amounts(second) - amounts(first)).max() < 1e-8 * np.abs(amounts(first)).max()


def test_same_request_same_bytes(client, walker, row):
    """1000 repeats one after the other, then from several threads, other requests in between."""
    request = scenes.standing(client, walker, levels=True)
    other = scenes.standing(client, walker, facets=4)
    first = client.solve(request).body
    for i in range(1000):
        if i % 50 == 0:
            client.solve(other)
        assert client.solve(request).body == first
    with concurrent.futures.ThreadPoolExecutor(8) as pool:
        bodies = list(pool.map(lambda i: client.solve(other if i % 7 == 0 else request).body, range(400)))
    assert {b for i, b in enumerate(bodies) if i % 7} == {first}
    row("same request, same bytes", "1000 repeats and 8 threads")
