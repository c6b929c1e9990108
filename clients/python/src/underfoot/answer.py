"""What comes back, as frozen dataclasses over numpy arrays. `document` is always the JSON as it came.

All numbers are SI, in world axes unless a name says otherwise; a wrench is what the ground exerts on the robot, about
the sole-frame origin, six numbers, force (N) first, moment (N m) second.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Callable, Mapping, TypeVar

import numpy as np
from numpy.typing import NDArray

from .errors import Garbled

Array = NDArray[np.float64]
_T = TypeVar("_T")


def shaped(read: Callable[[], _T]) -> _T:
    """Runs a reader and says so where the document has not the shape this client knows."""
    try:
        return read()
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise Garbled(f"the answer has not the form this client knows: {error!r}") from error


def vector(value: Any) -> Array:
    """A list of numbers as an array."""
    return np.asarray(value, dtype=np.float64)


def maybe(value: Any) -> Array | None:
    """The same, None kept."""
    return None if value is None else vector(value)


def wrench(value: Any) -> Array | None:
    """`{force, moment}` as six numbers; a point sole has no moment: three zeros stand there."""
    if value is None:
        return None
    return np.concatenate([vector(value["force"]), vector(value.get("moment") or (0.0, 0.0, 0.0))])


def twist(value: Any) -> Array | None:
    """`{linear, angular}` as six numbers."""
    if value is None:
        return None
    return np.concatenate([vector(value["linear"]), vector(value["angular"])])


@dataclass(frozen=True)
class FrameTerms:
    """Kinematics of one frame or sole."""

    name: str
    position: Array
    """Origin (m), world."""
    orientation: Array
    """Unit quaternion [x, y, z, w], frame axes to world axes."""
    twist: Array
    """Velocity of the origin (m/s) and angular velocity (rad/s), world axes."""
    jacobian: Array
    """6 x n, linear rows first, world axes; columns in the axes of the request."""
    bias_acceleration: Array
    """J_dot nu (m/s^2, rad/s^2)."""


@dataclass(frozen=True)
class Dynamics:
    """Rigid-body terms of one state, in the velocity axes of the request."""

    mass: float
    """Mass (kg)."""
    velocities: tuple[str, ...]
    """Names of the generalised velocities, in order."""
    mass_matrix: Array
    """n x n (kg, kg m, kg m^2)."""
    bias: Array
    """Coriolis, centrifugal and gravity terms (N, N m); without joint friction."""
    friction: Array
    """Joint friction (N, N m)."""
    center_of_mass: Array
    """m, world."""
    center_of_mass_velocity: Array
    """m/s, world."""
    momentum: Array
    """Linear (kg m/s) and angular about the centre of mass (kg m^2/s), world axes."""
    momentum_matrix: Array
    """Centroidal momentum matrix, 6 x n."""
    momentum_bias: Array
    """Its rate term, A_dot nu."""
    kinetic_energy: float
    """J."""
    potential_energy: float
    """J, zero at the world origin."""
    frames: tuple[FrameTerms, ...]
    document: Mapping[str, Any] = field(repr=False)

    def frame(self, name: str) -> FrameTerms:
        """The frame or sole with this name."""
        for frame in self.frames:
            if frame.name == name:
                return frame
        raise KeyError(name)

    @staticmethod
    def read(document: Mapping[str, Any]) -> Dynamics:
        """From the service's document."""
        return shaped(lambda: Dynamics._read(document))

    @staticmethod
    def _read(d: Mapping[str, Any]) -> Dynamics:
        return Dynamics(
            mass=d["mass"],
            velocities=tuple(d["velocities"]),
            mass_matrix=vector(d["mass_matrix"]),
            bias=vector(d["bias"]),
            friction=vector(d["friction"]),
            center_of_mass=vector(d["center_of_mass"]),
            center_of_mass_velocity=vector(d["center_of_mass_velocity"]),
            momentum=_six(d["momentum"]),
            momentum_matrix=vector(d["momentum_matrix"]),
            momentum_bias=_six(d["momentum_bias"]),
            kinetic_energy=d["kinetic_energy"],
            potential_energy=d["potential_energy"],
            frames=tuple(
                FrameTerms(
                    name=f["name"],
                    position=vector(f["position"]),
                    orientation=vector(f["orientation"]),
                    twist=_six(f["twist"]),
                    jacobian=vector(f["jacobian"]),
                    bias_acceleration=_six(f["bias_acceleration"]),
                )
                for f in d["frames"]
            ),
            document=d,
        )


def _six(value: Any) -> Array:
    """Six numbers, linear first, from `{linear, angular}` or a flat or nested list."""
    if isinstance(value, Mapping):
        return np.concatenate([vector(value["linear"]), vector(value["angular"])])
    return vector(value).reshape(6)


@dataclass(frozen=True)
class Sole:
    """One sole of an answer."""

    name: str
    wrench: Array | None
    """At the tick's end, world axes."""
    wrench_in_sole_axes: Array | None
    wrench_over_tick: Array | None
    """What acts in the dynamics over the tick, world axes."""
    present: Array | None
    """Present wrench, measured or modelled, world axes."""
    normal_force: float | None
    """Along the ground normal, at the tick's end (N)."""
    center_of_pressure: Array | None
    """Sole axes (m)."""
    friction_use: float | None
    """|f_t| / (mu f_n): 1 is the limit."""
    edge_distance: float | None
    """Distance of the centre of pressure from the nearest edge (m), negative outside."""
    document: Mapping[str, Any] = field(repr=False)


@dataclass(frozen=True)
class Task:
    """One task of an answer, row by row."""

    name: str
    priority: int | None
    """None for a task that must hold."""
    rows: tuple[str, ...]
    units: tuple[str, ...]
    desired: Array
    achieved: Array
    residual: Array
    """achieved - desired."""


@dataclass(frozen=True)
class Answer:
    """The answer to a solve request."""

    status: str
    """`solved`, `infeasible`, `not_reachable`, `ill_posed` or `inaccurate`."""
    joints: tuple[str, ...]
    """Joint names, in the order of the arrays beside them."""
    torques: Array | None
    """N m (N for sliding joints); None where there is no answer."""
    joint_accelerations: Array | None
    """rad/s^2 (m/s^2)."""
    base_acceleration: Array | None
    """Linear (m/s^2) and angular (rad/s^2) in the request's velocity axes; None on a fixed base."""
    soles: tuple[Sole, ...]
    tasks: tuple[Task, ...]
    levels: tuple[Mapping[str, Any], ...]
    warnings: tuple[Mapping[str, Any], ...]
    certificate: Mapping[str, Any] | None
    document: Mapping[str, Any] = field(repr=False)
    """Everything, as it came."""
    body: bytes = field(repr=False)
    """The bytes: the same request gives the same bytes on the same machine and build."""
    timing: str = field(repr=False, default="")
    """The Server-Timing header."""

    @property
    def solved(self) -> bool:
        """True where the certificate holds."""
        return self.status == "solved"

    def torque(self, joint: str) -> float:
        """Torque of one joint (N m or N)."""
        if self.torques is None:
            raise LookupError(f"status {self.status}: there are no torques")
        return float(self.torques[self.joints.index(joint)])

    def sole(self, name: str) -> Sole:
        """The sole with this name."""
        for sole in self.soles:
            if sole.name == name:
                return sole
        raise KeyError(name)

    def task(self, name: str) -> Task:
        """The task with this name."""
        for task in self.tasks:
            if task.name == name:
                return task
        raise KeyError(name)
