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
    """`{force, moment}` as six numbers; None stays None."""
    if value is None:
        return None
    return np.concatenate([vector(value["force"]), vector(value["moment"])])


def six(value: Any) -> Array:
    """`{linear, angular}` as six numbers."""
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
        """From the service's answer to a dynamics request."""
        terms = shaped(lambda: document["dynamics"])
        if terms is None:
            raise Garbled("the service withheld the terms: a number in them was not finite")
        return shaped(lambda: Dynamics.of(terms))

    @staticmethod
    def of(d: Mapping[str, Any]) -> Dynamics:
        """From the member `dynamics` of an answer."""
        return Dynamics(
            mass=d["mass"],
            velocities=tuple(d["velocities"]),
            mass_matrix=vector(d["mass_matrix"]),
            bias=vector(d["bias"]),
            friction=vector(d["friction"]),
            center_of_mass=vector(d["center_of_mass"]),
            center_of_mass_velocity=vector(d["center_of_mass_velocity"]),
            momentum=six(d["momentum"]),
            momentum_matrix=vector(d["momentum_matrix"]),
            momentum_bias=six(d["momentum_bias"]),
            kinetic_energy=d["kinetic_energy"],
            potential_energy=d["potential_energy"],
            frames=tuple(
                FrameTerms(
                    name=f["name"],
                    position=vector(f["position"]),
                    orientation=vector(f["orientation"]),
                    twist=six(f["twist"]),
                    jacobian=vector(f["jacobian"]),
                    bias_acceleration=six(f["bias_acceleration"]),
                )
                for f in d["frames"]
            ),
            document=d,
        )


@dataclass(frozen=True)
class Comparison:
    """The caller's own rigid-body terms beside the service's."""

    verdict: str
    """`agrees`, `explained` (by a convention or a pair of them) or `unexplained`."""
    explanations: tuple[tuple[str, ...], ...]
    """Codes of the conventions, one tuple per explanation; more than one where this state does not tell them apart."""
    texts: tuple[str, ...]
    """What the first explanation says, a sentence per convention."""
    joints: tuple[str, ...]
    """Joint names in the caller's order, where the first explanation is about it."""
    velocities: Mapping[str, float]
    """Largest relative error of each generalised velocity's rows and columns, as it stands."""
    document: Mapping[str, Any] = field(repr=False)

    @staticmethod
    def read(document: Mapping[str, Any]) -> Comparison:
        """From the service's answer to a comparison."""
        return shaped(lambda: Comparison._read(document))

    @staticmethod
    def _read(d: Mapping[str, Any]) -> Comparison:
        first = d["explanations"][0]["conventions"] if d["explanations"] else []
        return Comparison(
            verdict=d["verdict"],
            explanations=tuple(tuple(c["code"] for c in e["conventions"]) for e in d["explanations"]),
            texts=tuple(c["text"] for c in first),
            joints=next((tuple(c["joints"]) for c in first if c.get("joints")), ()),
            velocities={v["name"]: v["relative"] for v in d["velocities"]},
            document=d,
        )


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
    vertex_forces: Array
    """(n, 3), world axes (N); not unique; empty where the friction set does not use them."""
    acceleration: Array | None
    """Linear (m/s^2) and angular (rad/s^2), world axes."""
    document: Mapping[str, Any] = field(repr=False)

    @staticmethod
    def of(d: Mapping[str, Any]) -> Sole:
        """From one entry of `soles`."""
        return Sole(
            name=d["name"],
            wrench=wrench(d["wrench"]),
            wrench_in_sole_axes=wrench(d["wrench_in_sole_axes"]),
            wrench_over_tick=wrench(d["wrench_over_tick"]),
            present=wrench(d["present"]),
            normal_force=d["normal_force"],
            center_of_pressure=maybe(d["center_of_pressure"]),
            friction_use=d["friction_use"],
            edge_distance=d["edge_distance"],
            vertex_forces=vector(d["vertex_forces"]).reshape(-1, 3),
            acceleration=None if d["acceleration"] is None else six(d["acceleration"]),
            document=d,
        )


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
    """Empty where nothing was found."""
    residual: Array
    """achieved - desired."""

    @staticmethod
    def of(d: Mapping[str, Any]) -> Task:
        """From one entry of `tasks`."""
        return Task(
            name=d["name"],
            priority=d["priority"],
            rows=tuple(d["rows"]),
            units=tuple(d["units"]),
            desired=vector(d["desired"]),
            achieved=vector(d["achieved"]),
            residual=vector(d["residual"]),
        )


@dataclass(frozen=True)
class Answer:
    """The answer to a solve request."""

    status: str
    """`solved`, `infeasible`, `not_reachable`, `ill_posed`, `inaccurate` or `cancelled`."""
    tick_rule: str
    """By which the wrench over the tick was predicted: `held`, `backward_euler`, `trapezoid` or `explicit`."""
    tick_rule_by_default: bool
    """True where the request named no rule."""
    joints: tuple[str, ...]
    """Joint names, in the order of the arrays beside them; empty where there is no answer."""
    torques: Array | None
    """N m (N for sliding joints); None where there is no answer."""
    joint_accelerations: Array | None
    """rad/s^2 (m/s^2)."""
    base_acceleration: Array | None
    """Linear (m/s^2) and angular (rad/s^2) in the request's velocity axes; None on a fixed base."""
    soles: tuple[Sole, ...]
    tasks: tuple[Task, ...]
    levels: tuple[Mapping[str, Any], ...]
    """One entry per priority: cost, rank decisions, freedom left, faces, error bound."""
    warnings: tuple[Mapping[str, Any], ...]
    certificate: Mapping[str, Any] | None
    """What was verified without the solver; None where there was nothing to verify."""
    dynamics: Dynamics | None
    """Rigid-body terms, where `include` asked for them."""
    document: Mapping[str, Any] = field(repr=False)
    """Everything, as it came."""
    body: bytes = field(repr=False)
    """The bytes: the same request gives the same bytes on the same machine and build."""
    timing: str = field(repr=False, default="")
    """The Server-Timing header."""

    @staticmethod
    def read(document: Mapping[str, Any], body: bytes, timing: str) -> Answer:
        """From the service's answer to a solve request."""
        return shaped(lambda: Answer._read(document, body, timing))

    @staticmethod
    def _read(d: Mapping[str, Any], body: bytes, timing: str) -> Answer:
        joints = d["joints"]
        base = d["base_acceleration"]
        return Answer(
            status=d["status"],
            tick_rule=d["tick"]["rule"],
            tick_rule_by_default=d["tick"]["rule_by_default"],
            joints=tuple(j["name"] for j in joints or ()),
            torques=None if joints is None else vector([j["torque"] for j in joints]),
            joint_accelerations=None if joints is None else vector([j["acceleration"] for j in joints]),
            base_acceleration=None if base is None else six(base),
            soles=tuple(Sole.of(s) for s in d["soles"]),
            tasks=tuple(Task.of(t) for t in d["tasks"]),
            levels=tuple(d["levels"]),
            warnings=tuple(d["warnings"]),
            certificate=d["certificate"],
            dynamics=Dynamics.of(d["dynamics"]) if d.get("dynamics") else None,
            document=d,
            body=body,
            timing=timing,
        )

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
