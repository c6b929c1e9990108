"""What comes back of an identification of the ground, as frozen dataclasses over numpy arrays."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Mapping

from .answer import Array, shaped, vector


@dataclass(frozen=True)
class Parameter:
    """One estimate of one stance."""

    name: str
    unit: str
    value: float
    deviation: float
    interval: Array
    """95 % interval, low and high."""
    bias: float | None
    """Expected error from noise on the motion, estimate less truth; None where it cannot be told."""
    excitation: str
    """`identified`, `weak` or `not_identifiable`."""
    advice: str | None
    """What was seen and what motion would help; None where it is identified."""


@dataclass(frozen=True)
class IdentifiedStance:
    """One stance of one sole."""

    begin: float
    """s."""
    end: float
    """s."""
    samples: int
    parameters: tuple[Parameter, ...]
    covariance: Array
    """Of the parameters in their order."""
    change: float | None
    """Probability of a larger change on the same ground than from the stance before; None for the first."""
    unphysical: tuple[str, ...]
    document: Mapping[str, Any] = field(repr=False)

    def parameter(self, name: str) -> Parameter:
        """The parameter with this name."""
        for parameter in self.parameters:
            if parameter.name == name:
                return parameter
        raise KeyError(name)


@dataclass(frozen=True)
class IdentifiedSole:
    """One sole of the log."""

    name: str
    area: float | None
    """m^2; None for a point."""
    ground: Mapping[str, Any] | None
    """`law` for a contact and `spread` for a solve request; None where the ground cannot be told."""
    ground_withheld: str | None
    stances: tuple[IdentifiedStance, ...]
    times: Array
    """Of the estimate over time (s)."""
    values: Array
    """The estimate over time, a row a time."""
    deviations: Array
    """Its standard deviations."""
    document: Mapping[str, Any] = field(repr=False)


@dataclass(frozen=True)
class Identification:
    """The answer to an identification request."""

    status: str
    """`identified`, `partly` or `not_identified`."""
    soles: tuple[IdentifiedSole, ...]
    remarks: tuple[Mapping[str, Any], ...]
    """About the log: what was left out or looks wrong, with lines."""
    document: Mapping[str, Any] = field(repr=False)
    body: bytes = field(repr=False)

    def sole(self, name: str) -> IdentifiedSole:
        """The sole with this name."""
        for sole in self.soles:
            if sole.name == name:
                return sole
        raise KeyError(name)

    @staticmethod
    def read(document: Mapping[str, Any], body: bytes) -> Identification:
        """From the service's answer."""
        return shaped(lambda: Identification._read(document, body))

    @staticmethod
    def _read(d: Mapping[str, Any], body: bytes) -> Identification:
        return Identification(d["status"], tuple(_sole(s) for s in d["soles"]), tuple(d["remarks"]), d, body)


def _sole(d: Mapping[str, Any]) -> IdentifiedSole:
    history = d["history"]
    columns = len(history["parameters"])
    return IdentifiedSole(
        name=d["name"],
        area=d["area"],
        ground=d["ground"],
        ground_withheld=d["ground_withheld"],
        stances=tuple(_stance(s) for s in d["stances"]),
        times=vector(history["time"]),
        values=vector(history["values"]).reshape(len(history["time"]), columns),
        deviations=vector(history["deviations"]).reshape(len(history["time"]), columns),
        document=d,
    )


def _stance(d: Mapping[str, Any]) -> IdentifiedStance:
    return IdentifiedStance(
        begin=d["begin"],
        end=d["end"],
        samples=d["samples"],
        parameters=tuple(
            Parameter(p["name"], p["unit"], p["value"], p["deviation"], vector(p["interval"]), p["bias"], p["excitation"], p["advice"])
            for p in d["parameters"]
        ),
        covariance=vector(d["covariance"]),
        change=None if d["change"] is None else d["change"]["probability"],
        unphysical=tuple(d["unphysical"]),
        document=d,
    )
