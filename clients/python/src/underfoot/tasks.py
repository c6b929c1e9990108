"""Tasks, for the member `tasks` of a request.

Every task costs `weight * sum (residual / scale)^2` at its `priority` (1 first, strictly in order), or holds like
physics with `must_hold=True`; exactly one of the two. `scale` is a residual in the task's own unit that costs `weight`;
`scale_angular` the same for the angular part. `axes`: the components that count, of `x y z rx ry rz`; all when left out.
These members are the keywords that every function passes on: `priority`, `must_hold`, `weight`, `scale`,
`scale_angular`, `axes`.
"""

from __future__ import annotations

from typing import Any, Iterable

from numpy.typing import ArrayLike

from .build import Part, given, numbers, six

Pair = tuple[float, float]


def _gains(pair: Pair | None) -> Part | None:
    return None if pair is None else {"position": pair[0], "velocity": pair[1]}


def _linear_angular(pair: Pair | None) -> Part | None:
    return None if pair is None else {"linear": pair[0], "angular": pair[1]}


def momentum_rate(
    name: str,
    *,
    rate: ArrayLike | None = None,
    reference: ArrayLike | None = None,
    momentum_gain: Pair | None = None,
    center: ArrayLike | None = None,
    position_gain: float | None = None,
    **common: Any,
) -> Part:
    """Rate of momentum (N; N m about the centre of mass): rate + momentum_gain (reference - L) + position_gain m (center - c).
    `rate` and `reference` (kg m/s, kg m^2/s): six numbers. `momentum_gain`: linear and angular (1/s). `center`: m.
    `position_gain`: 1/s^2, linear part only."""
    return given(
        name=name,
        kind="momentum_rate",
        rate=six(rate),
        reference=six(reference),
        momentum_gain=_linear_angular(momentum_gain),
        center=numbers(center),
        position_gain=position_gain,
        **common,
    )


def momentum_second_rate(
    name: str,
    *,
    second_rate: ArrayLike | None = None,
    rate: ArrayLike | None = None,
    rate_gain: Pair | None = None,
    reference: ArrayLike | None = None,
    momentum_gain: Pair | None = None,
    center: ArrayLike | None = None,
    position_gain: float | None = None,
    **common: Any,
) -> Part:
    """Second rate of momentum (N/s; N m/s), for ground that gives: second_rate + rate_gain (rate - L_dot)
    + momentum_gain (reference - L) + position_gain m (center - c). Gains in 1/s, 1/s^2 and 1/s^3; vectors as in
    `momentum_rate`."""
    return given(
        name=name,
        kind="momentum_second_rate",
        second_rate=six(second_rate),
        rate=six(rate),
        rate_gain=_linear_angular(rate_gain),
        reference=six(reference),
        momentum_gain=_linear_angular(momentum_gain),
        center=numbers(center),
        position_gain=position_gain,
        **common,
    )


def center_of_mass(
    name: str,
    *,
    acceleration: ArrayLike | None = None,
    velocity: ArrayLike | None = None,
    position: ArrayLike | None = None,
    gains: Pair | None = None,
    **common: Any,
) -> Part:
    """Acceleration of the centre of mass (m/s^2): acceleration + gains[1] (velocity - present) + gains[0] (position -
    present); gains in 1/s^2 and 1/s."""
    return given(
        name=name,
        kind="center_of_mass",
        acceleration=numbers(acceleration),
        velocity=numbers(velocity),
        position=numbers(position),
        gains=_gains(gains),
        **common,
    )


def frame_position(
    name: str,
    frame: str,
    *,
    point: ArrayLike | None = None,
    acceleration: ArrayLike | None = None,
    velocity: ArrayLike | None = None,
    position: ArrayLike | None = None,
    gains: Pair | None = None,
    **common: Any,
) -> Part:
    """Acceleration of a point (m, link axes) of a link (m/s^2), otherwise as `center_of_mass`."""
    return given(
        name=name,
        kind="frame_position",
        frame=frame,
        point=numbers(point),
        acceleration=numbers(acceleration),
        velocity=numbers(velocity),
        position=numbers(position),
        gains=_gains(gains),
        **common,
    )


def frame_orientation(
    name: str,
    frame: str,
    *,
    acceleration: ArrayLike | None = None,
    velocity: ArrayLike | None = None,
    orientation: ArrayLike | None = None,
    gains: Pair | None = None,
    **common: Any,
) -> Part:
    """Angular acceleration of a link (rad/s^2). `velocity`: rad/s; `orientation`: quaternion, link axes to world axes;
    gains in 1/s^2 and 1/s."""
    return given(
        name=name,
        kind="frame_orientation",
        frame=frame,
        angular_acceleration=numbers(acceleration),
        angular_velocity=numbers(velocity),
        orientation=numbers(orientation),
        gains_angular=_gains(gains),
        **common,
    )


def frame_pose(
    name: str,
    frame: str,
    *,
    point: ArrayLike | None = None,
    acceleration: ArrayLike | None = None,
    velocity: ArrayLike | None = None,
    position: ArrayLike | None = None,
    gains: Pair | None = None,
    angular_acceleration: ArrayLike | None = None,
    angular_velocity: ArrayLike | None = None,
    orientation: ArrayLike | None = None,
    gains_angular: Pair | None = None,
    **common: Any,
) -> Part:
    """`frame_position` with `scale`, and `frame_orientation` with `scale_angular`, in one task."""
    return given(
        name=name,
        kind="frame_pose",
        frame=frame,
        point=numbers(point),
        acceleration=numbers(acceleration),
        velocity=numbers(velocity),
        position=numbers(position),
        gains=_gains(gains),
        angular_acceleration=numbers(angular_acceleration),
        angular_velocity=numbers(angular_velocity),
        orientation=numbers(orientation),
        gains_angular=_gains(gains_angular),
        **common,
    )


def posture(name: str, joints: Iterable[tuple[str, float]], *, gains: Pair | None = None, **common: Any) -> Part:
    """Joint accelerations (rad/s^2 or m/s^2) that lead to positions. `joints`: (name, position in rad or m); gains in
    1/s^2 and 1/s."""
    return given(name=name, kind="posture", joints=[{"name": n, "position": float(q)} for n, q in joints], gains=_gains(gains), **common)


def joint_acceleration(name: str, joints: Iterable[tuple[str, float]], **common: Any) -> Part:
    """Given joint accelerations: (name, rad/s^2 or m/s^2)."""
    return given(name=name, kind="joint_acceleration", joints=[{"name": n, "acceleration": float(a)} for n, a in joints], **common)


def base_acceleration(name: str, *, linear: ArrayLike | None = None, angular: ArrayLike | None = None, **common: Any) -> Part:
    """Given rate of the base velocity, world axes (m/s^2; rad/s^2)."""
    return given(name=name, kind="base_acceleration", acceleration=numbers(linear), angular_acceleration=numbers(angular), **common)


def wrench(name: str, sole: str, value: ArrayLike, *, approach: float | None = None, **common: Any) -> Part:
    """Wrench of a sole at the tick's end: six numbers (N, N m), or approached at a rate (1/s)."""
    return given(name=name, kind="wrench", sole=sole, wrench=six(value, "force", "moment"), approach=approach, **common)


def wrench_smoothness(name: str, *, sole: str | None = None, **common: Any) -> Part:
    """The wrench stays near the present one, of one sole or of all."""
    return given(name=name, kind="wrench_smoothness", sole=sole, **common)


def effort(name: str, joints: Iterable[tuple[str, float]] | None = None, **common: Any) -> Part:
    """Torques near a reference: (name, N m or N); all actuated joints near zero when left out."""
    listed = None if joints is None else [{"name": n, "torque": float(t)} for n, t in joints]
    return given(name=name, kind="effort", joints=listed, **common)
