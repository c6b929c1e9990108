"""Limits of joints and torques, for the member `limits` of a request.

`joints` None: every joint for which the model gives such a limit. `treatment`: `build.hard()` (the default) or
`build.soft(...)`.
"""

from __future__ import annotations

from typing import Any, Iterable, Mapping

from .build import Part, given

Treatment = Mapping[str, Any] | None


def torque(joints: Iterable[tuple[str, float | None]] | None = None, *, name: str | None = None, treatment: Treatment = None) -> Part:
    """|torque| at most the bound (N m or N); a bound None comes from the model. `joints`: (name, bound)."""
    listed = None if joints is None else [given(name=n, bound=b) for n, b in joints]
    return given(name=name, kind="torque", joints=listed, treatment=treatment)


def torque_speed(joints: Iterable[tuple[str, float, float]] | None = None, *, name: str | None = None, treatment: Treatment = None) -> Part:
    """Torque that falls linearly with speed. `joints`: (name, stall torque in N m or N, no-load speed in rad/s or m/s)."""
    listed = None if joints is None else [given(name=n, stall=s, no_load_speed=v) for n, s, v in joints]
    return given(name=name, kind="torque_speed", joints=listed, treatment=treatment)


def coupled_torque(joints: Iterable[tuple[str, float]], bound: float, *, name: str | None = None, treatment: Treatment = None) -> Part:
    """Sum of coefficient times torque at most `bound` (N m or N). `joints`: (name, coefficient)."""
    return given(name=name, kind="coupled_torque", joints=[given(name=n, coefficient=c) for n, c in joints], bound=bound, treatment=treatment)


def position(
    joints: Iterable[tuple[str, float | None, float | None]] | None = None,
    *,
    horizon: float | None = None,
    name: str | None = None,
    treatment: Treatment = None,
) -> Part:
    """lower <= q + H q_dot + H^2 q_ddot / 2 <= upper over the horizon H (s). `joints`: (name, lower, upper), rad or m."""
    listed = None if joints is None else [given(name=n, lower=low, upper=high) for n, low, high in joints]
    return given(name=name, kind="position", joints=listed, horizon=horizon, treatment=treatment)


def velocity(
    joints: Iterable[tuple[str, float | None]] | None = None,
    *,
    horizon: float | None = None,
    name: str | None = None,
    treatment: Treatment = None,
) -> Part:
    """|q_dot + H q_ddot| at most the bound over the horizon H (s). `joints`: (name, bound), rad/s or m/s."""
    listed = None if joints is None else [given(name=n, bound=b) for n, b in joints]
    return given(name=name, kind="velocity", joints=listed, horizon=horizon, treatment=treatment)
