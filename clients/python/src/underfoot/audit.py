"""What an audit says. `document` is always the JSON as it came."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Mapping

from .answer import Answer, shaped


@dataclass(frozen=True)
class Hypothesis:
    """One mistake that was tried."""

    mistake: str
    """Stable short code, e.g. `gravity` or `torque_sign`."""
    subject: str
    """The joint, limit or other part of the request it concerns; empty where all of it."""
    text: str
    distance_left: float | None
    """Largest torque difference left (N m or N); None where the mistaken question has no answer."""
    in_tolerances: float | None
    """The same in tolerances: explained up to 1."""
    consistent: bool
    """True where the mistake explains the torques within tolerance."""


@dataclass(frozen=True)
class Audit:
    """A controller's answer, judged."""

    verdict: str
    """`pass`, `fail` or `undecided`, under the request's own tick rule."""
    rule_dependent: bool
    """True where the tick rule `held` leads to another verdict."""
    reasons: tuple[str, ...]
    """Why the verdict is not `pass`."""
    first_difference: int | None
    """First priority that differs from the reference's, with the request's targets; None where none does."""
    broken: tuple[str, ...]
    """Names of broken limits."""
    conclusion: str | None
    """`consistent`, `broken_constraint` or `unknown`; None where no causes were looked for."""
    hypotheses: tuple[Hypothesis, ...]
    """Mistakes that were tried, nearest first."""
    warnings: tuple[str, ...]
    document: Mapping[str, Any] = field(repr=False)
    body: bytes = field(repr=False)
    timing: str = field(repr=False, default="")

    @staticmethod
    def read(document: Mapping[str, Any], body: bytes, timing: str) -> Audit:
        """From the service's answer to an audit request."""
        return shaped(lambda: Audit._read(document, body, timing))

    @staticmethod
    def _read(d: Mapping[str, Any], body: bytes, timing: str) -> Audit:
        own = d["judgements"][0] if d["judgements"] else {"reasons": [], "limits": [], "comparisons": []}
        causes = d["causes"] or {"conclusion": None, "hypotheses": []}
        return Audit(
            verdict=d["verdict"],
            rule_dependent=d["rule_dependent"],
            reasons=tuple(r["text"] for r in own["reasons"]),
            first_difference=own["comparisons"][-1]["first_difference"] if own["comparisons"] else None,
            broken=tuple(dict.fromkeys(x["limit"] for x in own["limits"] if x["broken"])),
            conclusion=causes["conclusion"],
            hypotheses=tuple(Hypothesis(**{k: h[k] for k in Hypothesis.__dataclass_fields__}) for h in causes["hypotheses"]),
            warnings=tuple(d["warnings"]),
            document=d,
            body=body,
            timing=timing,
        )

    @property
    def passed(self) -> bool:
        """True where the verdict is `pass`."""
        return self.verdict == "pass"

    @property
    def causes(self) -> tuple[Hypothesis, ...]:
        """The mistakes that explain the torques within tolerance."""
        return tuple(h for h in self.hypotheses if h.consistent)


def claim_of(answer: Answer) -> dict[str, Any]:
    """The service's own answer in the form a controller's answer has."""
    d = answer.document
    if d["joints"] is None:
        raise LookupError(f"status {answer.status}: there is nothing to audit")
    claim: dict[str, Any] = {
        "joints": d["joints"],
        "soles": [{"name": s["name"], "wrench": s["wrench"]} for s in d["soles"] if s["wrench"] is not None],
    }
    if d["base_acceleration"] is not None:
        claim["base_acceleration"] = d["base_acceleration"]
    return claim
