"""The client: registers models, asks for dynamics and solves."""

from __future__ import annotations

import json
from dataclasses import dataclass, field
from types import TracebackType
from typing import Any, Iterable, Mapping, Sequence

from .answer import Answer, Comparison, Dynamics, shaped
from .audit import Audit, claim_of
from .batch import Batch
from .build import FORMAT
from .errors import Refused
from .identified import Identification
from .transport import Reply, Transport, plain, problem, segment

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

    def export(self, request: Mapping[str, Any] | None = None, /, **members: Any) -> dict[str, str]:
        """The assembled problem of a solve request as texts by file name: Matrix Market exchange format, and `names.json`."""
        document = {"format": FORMAT, **(request or {}), **members}
        model = document.get("model")
        document["model"] = _reference(model)
        found = self._post("/v1/export", document, model).document()
        return shaped(lambda: {file["name"]: file["text"] for file in found["files"]})

    def compare(
        self,
        model: Model | str | Mapping[str, Any],
        state: Mapping[str, Any],
        *,
        mass_matrix: Any = None,
        bias: Any = None,
        momentum: Any = None,
        frames: Sequence[Mapping[str, Any]] = (),
        **more: Any,
    ) -> Comparison:
        """Your own terms of one state beside the service's, and the convention that explains the difference.

        Terms in your conventions, each optional: `mass_matrix` (n, n), `bias` (n,), `momentum` (6,), `frames` with `name`,
        `jacobian` (6, n) and `bias_acceleration` (6,). `state` is in the service's conventions. `more`: further members of the
        request, e.g. `gravity=`, `tolerance=`.
        """
        yours = {"mass_matrix": mass_matrix, "bias": bias, "momentum": momentum, "frames": list(frames) or None}
        yours = {name: value for name, value in yours.items() if value is not None}
        request = {"format": FORMAT, "model": _reference(model), "state": state, "yours": yours, **more}
        return Comparison.read(self._post("/v1/compare", request, model).document())

    def batch(
        self,
        template: Mapping[str, Any],
        lines: Iterable[Mapping[str, Any]],
        *,
        operation: str = "solve",
        members: Sequence[str] | None = None,
    ) -> Batch:
        """Answers many states in one exchange: iterate over what comes back, one `Line` for each of `lines`, in order.

        `template`: a request (model, contacts, tasks, ...), with or without `state`; a `Model` may stand for its id. Each of
        `lines` is put over it: members replace members, objects are merged, None removes; entries of `contacts`,
        `tasks` and `limits` are merged by name, and `without` names those to leave out. An `id` comes back with the answer.
        `lines` is taken as it comes, on a thread of its own; any length needs the memory of a few lines. `operation`:
        `solve` or `dynamics`. `members`: what of each answer is sent back; everything when left out.
        """
        request = {"format": FORMAT, **template}
        model = request.get("model")
        request["model"] = _reference(model)
        head: dict[str, Any] = {"format": FORMAT, "operation": operation, "template": request}
        if members is not None:
            head["members"] = list(members)
        return Batch(self._transport, head, lines, lambda refused: self._register_again(refused, model))

    def identify(
        self,
        settings: Mapping[str, Any],
        samples: Sequence[Mapping[str, Any]] | None = None,
        *,
        csv: str | bytes | None = None,
        ndjson: str | bytes | None = None,
    ) -> Identification:
        """Stiffness and damping of the ground from a log.

        `settings`: an identification request without samples. One of: `samples`, one mapping an instant; `csv`, a header of
        cells `name [unit]` and rows; `ndjson`, one JSON object a line. In remarks, lines of the latter two count the settings as
        line 1.
        """
        if sum(log is not None for log in (samples, csv, ndjson)) != 1:
            raise ValueError("give one of samples, csv and ndjson")
        document: dict[str, Any] = {"format": FORMAT, **settings}
        model = document.get("model")
        if isinstance(model, Model):
            document["model"] = model.id
        if samples is not None:
            reply = self._post("/v1/identify", {**document, "samples": list(samples)}, model)
        else:
            log, media = (csv, "text/csv") if csv is not None else (ndjson, "application/x-ndjson")
            lines = log.encode() if isinstance(log, str) else log
            head = json.dumps(plain(document), allow_nan=False, separators=(",", ":")).encode()
            reply = self._transport.raw("POST", "/v1/identify", head + b"\n" + (lines or b""), {"Content-Type": media})
            if not 200 <= reply.status < 300:
                raise problem(reply)
        return Identification.read(reply.document(), reply.body)

    def raw(self, method: str, path: str, body: bytes | None = None, headers: Mapping[str, str] | None = None) -> Reply:
        """One exchange as it is: no exceptions for refusals, no re-sending of models."""
        return self._transport.raw(method, path, body, dict(headers or {}))

    def _post(self, path: str, document: Mapping[str, Any], model: Any) -> Reply:
        try:
            return self._transport.post(path, document)
        except Refused as refused:
            if not self._register_again(refused, model):
                raise
        return self._transport.post(path, document)

    def _register_again(self, refused: Refused, model: Any) -> bool:
        """Registered models are a bounded cache: sends one that was lost again. False where that is not what was wrong."""
        source = self._source(model)
        if refused.status != 404 or refused.code != UNKNOWN_MODEL or source is None:
            return False
        self._transport.post("/v1/models", source)
        return True

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
