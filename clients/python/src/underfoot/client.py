"""The client: registers models, asks for dynamics and solves."""

from __future__ import annotations

from dataclasses import dataclass, field
from types import TracebackType
from typing import Any, Mapping, Sequence

from .answer import Answer, Dynamics, shaped
from .audit import Audit, claim_of
from .build import FORMAT
from .errors import Refused
from .transport import Reply, Transport, segment

UNKNOWN_MODEL = "unknown-model"
"""Problem code for a model id the service does not hold (any more)."""


@dataclass(frozen=True)
class Model:
    """A model the service holds. Its id is a hash of its content: the same content has the same id everywhere."""

    id: str
    name: str
    joints: tuple[str, ...]
    """Moving joints in the order of every joint array."""
    soles: tuple[str, ...]
    mass: float
    """kg."""
    remarks: tuple[str, ...]
    """What of the description was ignored, and other remarks."""
    document: Mapping[str, Any] = field(repr=False)
    source: Mapping[str, Any] | None = field(repr=False, default=None)
    """What it was made from, kept so that it can be sent again; None for a model only looked up."""


class Client:
    """Talks to one Underfoot service.

    Keeps one connection per thread; it may be shared between threads and used as a context manager.
    """

    def __init__(self, address: str = "http://127.0.0.1:7878", timeout: float = 60.0) -> None:
        """`address`: http://HOST:PORT. `timeout`: seconds to wait for a connection and for each read."""
        self._transport = Transport(address, timeout)
        self._sources: dict[str, Mapping[str, Any]] = {}

    def __enter__(self) -> Client:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        self.close()

    def close(self) -> None:
        """Closes this thread's connection."""
        self._transport.close()

    def health(self) -> Mapping[str, Any]:
        """The service's health document."""
        return self._transport.get("/health").document()

    def add_model(
        self,
        urdf: str,
        *,
        soles: Sequence[Mapping[str, Any]] = (),
        joints: Sequence[Mapping[str, Any]] = (),
        fixed_base: bool = False,
    ) -> Model:
        """Registers a robot.

        `urdf`: the text of the description. `soles`: see `build.sole` and `build.point_sole`. `joints`: what the
        URDF does not say, see `build.joint`. `fixed_base`: the base link is welded to the world.
        """
        source: dict[str, Any] = {"format": FORMAT, "urdf": urdf}
        if soles:
            source["soles"] = list(soles)
        if joints:
            source["joints"] = list(joints)
        if fixed_base:
            source["fixed_base"] = True
        model = _model(self._transport.post("/v1/models", source), source)
        self._sources[model.id] = source
        return model

    def model(self, id: str) -> Model:
        """Looks up a model by id; `Refused` with status 404 if the service does not hold it."""
        return _model(self._transport.get("/v1/models/" + segment(id)), self._sources.get(id))

    def dynamics(self, model: Model | str | Mapping[str, Any], state: Mapping[str, Any], **more: Any) -> Dynamics:
        """Rigid-body terms of one state. `more`: further members of the request, e.g. `gravity=`, `frames=`."""
        request = {"format": FORMAT, "model": _reference(model), "state": state, **more}
        return Dynamics.read(self._post("/v1/dynamics", request, model).document())

    def solve(self, request: Mapping[str, Any] | None = None, /, **members: Any) -> Answer:
        """Solves a request: a whole document, or its members as keywords; a `Model` may stand for its id."""
        document = {"format": FORMAT, **(request or {}), **members}
        model = document.get("model")
        if isinstance(model, Model):
            document["model"] = model.id
        reply = self._post("/v1/solve", document, model)
        return Answer.read(reply.document(), reply.body, reply.headers.get("server-timing", ""))

    def audit(
        self,
        request: Mapping[str, Any],
        answer: Mapping[str, Any] | Answer,
        *,
        tolerances: Mapping[str, float] | None = None,
        causes: bool | None = None,
    ) -> Audit:
        """Judges a controller's own `answer` to a solve request.

        `answer`: see `build.controller_answer`; an `Answer` of the service stands for its own torques, accelerations and
        wrenches. `tolerances`: see the schema `audit-request`, e.g. `{"relative": 1e-3, "torque": 0.05}`. `causes` False:
        do not look for what may have gone wrong.
        """
        question = {"format": FORMAT, **request}
        model = question.get("model")
        if isinstance(model, Model):
            question["model"] = model.id
        claim = claim_of(answer) if isinstance(answer, Answer) else answer
        document: dict[str, Any] = {"format": FORMAT, "request": question, "answer": claim}
        if tolerances is not None:
            document["tolerances"] = dict(tolerances)
        if causes is not None:
            document["causes"] = causes
        reply = self._post("/v1/audit", document, model)
        return Audit.read(reply.document(), reply.body, reply.headers.get("server-timing", ""))

    def raw(self, method: str, path: str, body: bytes | None = None, headers: Mapping[str, str] | None = None) -> Reply:
        """One exchange as it is: no exceptions for refusals, no re-sending of models."""
        return self._transport.raw(method, path, body, dict(headers or {}))

    def _post(self, path: str, document: Mapping[str, Any], model: Any) -> Reply:
        try:
            return self._transport.post(path, document)
        except Refused as refused:
            source = self._source(model)
            if refused.status != 404 or refused.code != UNKNOWN_MODEL or source is None:
                raise
        # Registered models are a bounded cache: send it again, once.
        self._transport.post("/v1/models", source)
        return self._transport.post(path, document)

    def _source(self, model: Any) -> Mapping[str, Any] | None:
        if isinstance(model, Model):
            return model.source or self._sources.get(model.id)
        return self._sources.get(model) if isinstance(model, str) else None


def _reference(model: Model | str | Mapping[str, Any]) -> Any:
    return model.id if isinstance(model, Model) else model


def _model(reply: Reply, source: Mapping[str, Any] | None) -> Model:
    d = reply.document()
    return shaped(
        lambda: Model(
            id=d["id"],
            name=d["name"],
            joints=tuple(j["name"] for j in d["joints"]),
            soles=tuple(s["name"] for s in d["soles"]),
            mass=d["mass"],
            remarks=tuple(d.get("remarks", ())),
            document=d,
            source=source,
        )
    )
