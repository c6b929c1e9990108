"""Builds the parts of requests as plain dicts, so that everything can also be written by hand.

SI units and radians throughout; vectors in world axes unless a name says otherwise; quaternions `[x, y, z, w]`; a wrench
is what the GROUND exerts on the robot, about the sole-frame origin. Vectors may be numpy arrays, lists or tuples.
Members left None are left out of the request, so that the service's own default holds. Six numbers, linear or force
first, stand for `{linear, angular}` or `{force, moment}`. Limits are in `limits`, tasks in `tasks`.
"""

from __future__ import annotations

from typing import Any, Mapping, Sequence

import numpy as np
from numpy.typing import ArrayLike

FORMAT = "underfoot/1"
Part = dict[str, Any]


def given(**members: Any) -> Part:
    """The members that are not None."""
    return {name: value for name, value in members.items() if value is not None}


def numbers(value: ArrayLike | None) -> Any:
    """Numbers as (nested) lists; None stays None."""
    return None if value is None else np.asarray(value, dtype=np.float64).tolist()


def six(value: ArrayLike | None, first: str = "linear", second: str = "angular") -> Part | None:
    """Six numbers as two named vectors; None stays None."""
    if value is None:
        return None
    flat = np.asarray(value, dtype=np.float64).reshape(-1)
    if flat.shape != (6,):
        raise ValueError(f"expected six numbers, {first} first, got {flat.shape[0]}")
    return {first: flat[:3].tolist(), second: flat[3:].tolist()}


# Robots


def sole(name: str, link: str, polygon: ArrayLike, *, position: ArrayLike | None = None, orientation: ArrayLike | None = None) -> Part:
    """A flat sole. `polygon`: convex, counter-clockwise, (n, 2) in m in the sole frame, whose z axis points out of the
    ground into the robot. `position` (m) and `orientation`: the sole frame in the axes of `link`."""
    return given(name=name, link=link, position=numbers(position), orientation=numbers(orientation), vertices=numbers(polygon))


def point_sole(name: str, link: str, *, position: ArrayLike | None = None, orientation: ArrayLike | None = None) -> Part:
    """A foot without area: it carries a force only. Placement as in `sole`."""
    return given(name=name, link=link, kind="point", position=numbers(position), orientation=numbers(orientation))


def joint(
    name: str,
    *,
    locked_at: float | None = None,
    actuated: bool | None = None,
    rotor_inertia: float | None = None,
    viscous_friction: float | None = None,
    coulomb_friction: float | None = None,
    torque_speed: tuple[float, float] | None = None,
    position: tuple[float, float] | None = None,
    speed: float | None = None,
    effort: float | None = None,
) -> Part:
    """What the URDF does not say about a joint, or says otherwise. `locked_at`: welded at this position (rad or m).
    `actuated` False: no motor. `rotor_inertia`: reflected, added to the mass matrix (kg m^2 or kg). `viscous_friction`:
    N m s/rad or N s/m. `coulomb_friction`: N m or N. `torque_speed`: stall torque (N m or N) and no-load speed (rad/s or
    m/s). `position`: lower and upper limit (rad or m). `speed`: rad/s or m/s. `effort`: N m or N."""
    return given(
        name=name,
        rotor_inertia=rotor_inertia,
        viscous_friction=viscous_friction,
        coulomb_friction=coulomb_friction,
        torque_speed=None if torque_speed is None else {"stall": torque_speed[0], "no_load_speed": torque_speed[1]},
        actuated=actuated,
        locked_at=locked_at,
        position=None if position is None else {"lower": position[0], "upper": position[1]},
        speed=speed,
        effort=effort,
    )


# State and tick


def state(
    joints: tuple[Sequence[str], ArrayLike, ArrayLike | None] | None = None,
    *,
    base_position: ArrayLike | None = None,
    base_orientation: ArrayLike | None = None,
    base_velocity: ArrayLike | None = None,
    velocity_axes: str | tuple[str, str] | None = None,
) -> Part:
    """The robot's state. `joints`: names, positions (rad or m), velocities (rad/s or m/s; None for zero).
    `base_position` (m) and `base_orientation`: base link frame in the world, for a floating base both are needed.
    `base_velocity`: six numbers, velocity of the base link origin (m/s) and angular velocity (rad/s), in
    `velocity_axes`: `"world"` (the default), `"base"`, or a pair of them for the linear and the angular part."""
    base = None
    if base_position is not None or base_orientation is not None or base_velocity is not None:
        velocity = six(base_velocity) or {}
        base = given(
            position=numbers(np.zeros(3) if base_position is None else base_position),
            orientation=numbers((0, 0, 0, 1) if base_orientation is None else base_orientation),
            linear_velocity=velocity.get("linear"),
            angular_velocity=velocity.get("angular"),
        )
    axes = None
    if velocity_axes is not None:
        linear, angular = (velocity_axes, velocity_axes) if isinstance(velocity_axes, str) else velocity_axes
        axes = {"linear": linear, "angular": angular}
    names, positions, velocities = joints if joints is not None else ((), (), None)
    return given(base=base, velocity_axes=axes, names=list(names), positions=numbers(positions), velocities=numbers(velocities))


def tick(length: float, rule: str | None = None) -> Part:
    """One control tick of `length` s. `rule`: `held` (the default), `backward_euler`, `trapezoid` or `explicit`."""
    return given(length=length, rule=rule)


# Ground


def bonded(
    *,
    normal_stiffness: float,
    normal_damping: float,
    tangential_stiffness: float | None = None,
    tangential_damping: float | None = None,
    per: str = "area",
) -> Part:
    """Ground that holds on to the sole, tension included. Stiffness in N/m^3 and damping in N s/m^3 with `per="area"`,
    in N/m and N s/m with `per="sole"`; tangential as normal where left out."""

    def both(normal: float, tangential: float | None) -> Any:
        return normal if tangential is None else {"normal": normal, "tangential": tangential}

    return {
        "kind": "bonded",
        "stiffness": both(normal_stiffness, tangential_stiffness),
        "damping": both(normal_damping, tangential_damping),
        "per": per,
    }


def rigid(*, stop: bool | None = None) -> Part:
    """Ground that does not give. `stop`: bring the sole to rest within the tick instead of zero acceleration."""
    return given(kind="rigid", stop=stop)


def rest_pose(position: ArrayLike, orientation: ArrayLike | None = None) -> Part:
    """Unloaded where the sole frame is at `position` (m), `orientation`."""
    return given(kind="pose", position=numbers(position), orientation=numbers(orientation))


def rest_touchdown(position: ArrayLike, plane_point: ArrayLike, orientation: ArrayLike | None = None) -> Part:
    """Tangential position and yaw from the sole pose at touchdown; height and tilt from the plane through
    `plane_point` (m) with the ground normal."""
    return given(kind="touchdown", position=numbers(position), orientation=numbers(orientation), plane_point=numbers(plane_point))


def rest_carries(force: ArrayLike, moment: ArrayLike | None = None) -> Part:
    """The rest pose from which the present sole pose, at rest, carries this force (N) and moment (N m)."""
    return given(kind="carries", force=numbers(force), moment=numbers(moment))


def contact(
    sole: str,
    law: Mapping[str, Any],
    *,
    rest: Mapping[str, Any] | None = None,
    normal: ArrayLike | None = None,
    rest_velocity: ArrayLike | None = None,
    measured: ArrayLike | None = None,
    measured_axes: str | None = None,
    friction: Mapping[str, Any] | None = None,
    normal_force: Mapping[str, Any] | None = None,
    wrench_rate: Mapping[str, Any] | None = None,
) -> Part:
    """One sole on the ground. `law`: `bonded` or `rigid`. `rest`: `rest_pose`, `rest_touchdown` or `rest_carries`;
    None with a measured wrench or a rigid law. `normal`: unit, out of the ground (default z). `rest_velocity`: of
    moving ground, six numbers (m/s, rad/s). `measured`: present wrench, six numbers (N, N m; three on a point sole), in
    `measured_axes`, `world` (the default) or `sole`."""
    wrench = None
    if measured is not None:
        flat = np.asarray(measured, dtype=np.float64).reshape(-1)
        moment = None if flat.shape == (3,) else flat[3:].tolist()
        wrench = given(force=flat[:3].tolist(), moment=moment, axes=measured_axes)
    return given(
        sole=sole,
        law=law,
        normal=numbers(normal),
        rest=rest,
        rest_velocity=six(rest_velocity),
        measured_wrench=wrench,
        friction=friction,
        normal_force=normal_force,
        wrench_rate=wrench_rate,
    )


# How strictly a limit holds


def hard() -> Part:
    """Always."""
    return {"kind": "hard"}


def soft(priority: int, *, weight: float | None = None, scale: float | None = None) -> Part:
    """May be exceeded: costs `weight * (excess / scale)^2` at `priority`; `scale` in the limit's unit."""
    return given(kind="soft", priority=priority, weight=weight, scale=scale)


def decay(rate: float) -> Part:
    """A present violation must shrink at `rate` (1/s)."""
    return {"kind": "decay", "rate": rate}


# Limits on one sole's wrench, members of `contact`


def friction(
    set: str,
    coefficient: float,
    *,
    torsion: float | None = None,
    facets: int | None = None,
    treatment: Mapping[str, Any] | None = None,
) -> Part:
    """Friction and unilateral contact. `set`: `vertex` (a sum of vertex forces, each in its cone) or `wrench` (force
    cone, centre of pressure, yaw moment; on a polygon with `torsion`, yaw moment per normal force, m). `facets`:
    pyramids with so many facets instead of circular cones."""
    return given(set=set, coefficient=coefficient, torsion=torsion, facets=facets, treatment=treatment)


def normal_force(*, least: float | None = None, largest: float | None = None, treatment: Mapping[str, Any] | None = None) -> Part:
    """Range of the normal force (N)."""
    return given(least=least, largest=largest, treatment=treatment)


def wrench_rate(*, force: float | None = None, moment: float | None = None, treatment: Mapping[str, Any] | None = None) -> Part:
    """Largest rate of each component over the tick (N/s, N m/s)."""
    return given(force=force, moment=moment, treatment=treatment)


# The request


def external(frame: str, force: ArrayLike, moment: ArrayLike | None = None, *, point: ArrayLike | None = None) -> Part:
    """A load from outside on the link `frame`: force (N) and moment (N m) about `point` (m, link axes), world axes."""
    return given(frame=frame, point=numbers(point), force=numbers(force), moment=numbers(moment))


def load(frame: str, mass: float, *, center: ArrayLike | None = None, inertia: ArrayLike | None = None) -> Part:
    """A mass (kg) that the link `frame` carries. `center`: its centre of mass in link axes (m). `inertia`: 3 x 3 about
    the centre of mass, link axes (kg m^2); a point mass when left out."""
    return given(frame=frame, mass=mass, center=numbers(center), inertia=numbers(inertia))


def latency(delay: float, torques: Sequence[tuple[str, float]]) -> Part:
    """Torques (name, N m or N) that act for `delay` s until the answer takes effect; every actuated joint once."""
    return {"delay": delay, "torques": [{"name": n, "torque": float(t)} for n, t in torques]}


def request(
    model: Any,
    state: Mapping[str, Any],
    tick: Mapping[str, Any],
    *,
    contacts: Sequence[Mapping[str, Any]] | None = None,
    limits: Sequence[Mapping[str, Any]] | None = None,
    tasks: Sequence[Mapping[str, Any]] | None = None,
    gravity: ArrayLike | None = None,
    **more: Any,
) -> Part:
    """A whole solve request. `model`: a `Model`, its id, or `{urdf, soles, joints}`. `gravity`: m/s^2, default
    (0, 0, -9.80665). `more`: further members: `external`, `loads`, `latency`, `include` (of "problem", "dynamics")."""
    return given(
        format=FORMAT,
        model=model,
        state=state,
        gravity=numbers(gravity),
        tick=tick,
        contacts=contacts,
        limits=limits,
        tasks=tasks,
        **more,
    )


# A controller's answer, for audits


def controller_answer(
    torques: Sequence[tuple[str, float]],
    *,
    accelerations: Sequence[tuple[str, float]] = (),
    base_acceleration: ArrayLike | None = None,
    wrenches: Mapping[str, ArrayLike] | None = None,
    targets: Mapping[str, ArrayLike] | None = None,
) -> Part:
    """What a controller answered. `torques`: (name, N m or N), every actuated joint once. Optional, where it says them:
    `accelerations` (name, rad/s^2 or m/s^2); `base_acceleration`, six numbers in the request's velocity axes; `wrenches` by
    sole name, six numbers (N, N m; three on a point sole) at the tick's end, of the ground on the robot, world axes; `targets` by task
    name, the desired value of each row."""
    expected = dict(accelerations)
    joints = [given(name=n, torque=float(t), acceleration=expected.pop(n, None)) for n, t in torques]
    joints += [{"name": n, "acceleration": float(a)} for n, a in expected.items()]
    soles = []
    for name, value in (wrenches or {}).items():
        flat = np.asarray(value, dtype=np.float64).reshape(-1)
        moment = None if flat.shape == (3,) else flat[3:].tolist()
        soles.append({"name": name, "wrench": given(force=flat[:3].tolist(), moment=moment)})
    tasks = [{"name": name, "desired": numbers(value)} for name, value in (targets or {}).items()]
    return given(joints=joints, base_acceleration=six(base_acceleration), soles=soles or None, tasks=tasks or None)
