"""JSON over one persistent HTTP connection per thread, with the standard library only.

A kept-alive connection may have been closed by the service while it lay idle; the next request then fails before
any byte of an answer arrives. That case alone is tried again, once, on a fresh connection: only where the
connection had served before and nothing of an answer was seen. A connection that breaks within an answer, or one
that never worked, is reported as `Unreachable`.
"""

from __future__ import annotations

import http.client
import json
import math
import socket
import threading
from dataclasses import dataclass
from typing import Any
from urllib.parse import quote, urlsplit

import numpy as np

from .errors import Busy, Fault, Garbled, NotFinite, Refused, Unreachable

_STALE = (http.client.RemoteDisconnected, ConnectionResetError, ConnectionAbortedError, BrokenPipeError)


def plain(value: Any, pointer: str = "") -> Any:
    """`value` with numpy arrays and scalars turned into lists and numbers, refused if any number is not finite."""
    if isinstance(value, np.ndarray):
        if value.dtype.kind == "f" and not np.isfinite(value).all():
            where = tuple(int(i) for i in np.argwhere(~np.isfinite(value))[0])
            raise NotFinite(pointer + "".join(f"/{i}" for i in where), value[where])
        if value.dtype.kind not in "fiub":
            return plain(value.tolist(), pointer)
        return value.tolist()
    if isinstance(value, dict):
        return {str(k): plain(v, f"{pointer}/{str(k).replace('~', '~0').replace('/', '~1')}") for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(v, f"{pointer}/{i}") for i, v in enumerate(value)]
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float) and not math.isfinite(value):
        raise NotFinite(pointer, value)
    return value


@dataclass(frozen=True)
class Reply:
    """A successful answer: its bytes, and the headers by lower-case name."""

    status: int
    body: bytes
    headers: dict[str, str]

    def document(self) -> Any:
        """The JSON in it."""
        try:
            return json.loads(self.body)
        except ValueError as error:
            raise Garbled(f"the answer is not JSON: {error}") from error


class Transport:
    """Sends requests to one address. Safe to share between threads: each thread has a connection of its own."""

    def __init__(self, address: str, timeout: float) -> None:
        parts = urlsplit(address if "//" in address else "http://" + address)
        if parts.scheme != "http" or not parts.hostname:
            raise ValueError(f"address {address!r}: expected http://HOST:PORT")
        self.host = parts.hostname
        self.port = parts.port or 80
        self.timeout = timeout
        self._own = threading.local()

    def close(self) -> None:
        """Closes this thread's connection; the next request opens a new one."""
        connection = getattr(self._own, "connection", None)
        if connection is not None:
            connection.close()
        self._own.connection = None

    def get(self, path: str) -> Reply:
        """GET, a problem raised as an exception."""
        return self._checked("GET", path, None)

    def post(self, path: str, document: Any) -> Reply:
        """POST of JSON, a problem raised as an exception."""
        body = json.dumps(plain(document), allow_nan=False, separators=(",", ":")).encode()
        return self._checked("POST", path, body)

    def raw(self, method: str, path: str, body: bytes | None, headers: dict[str, str] | None = None) -> Reply:
        """One exchange as it is, whatever the status."""
        sent = {"Accept": "application/json", **(headers or {})}
        if body is not None:
            sent.setdefault("Content-Type", "application/json")
        connection, fresh = self._connection()
        try:
            return self._exchange(connection, method, path, body, sent)
        except _STALE as error:
            self.close()
            if fresh:
                raise Unreachable(f"{self._name()}: the connection broke before an answer: {error}") from error
        except (OSError, http.client.HTTPException) as error:
            self.close()
            raise Unreachable(f"{self._name()}: {error}") from error
        # The kept-alive connection had gone stale: once more on a fresh one.
        connection, _ = self._connection()
        try:
            return self._exchange(connection, method, path, body, sent)
        except (OSError, http.client.HTTPException) as error:
            self.close()
            raise Unreachable(f"{self._name()}: {error}") from error

    def _name(self) -> str:
        return f"http://{self.host}:{self.port}"

    def _connection(self) -> tuple[http.client.HTTPConnection, bool]:
        connection = getattr(self._own, "connection", None)
        if connection is not None and connection.sock is not None:
            return connection, False
        connection = self.fresh()
        self._own.connection = connection
        return connection, True

    def fresh(self) -> http.client.HTTPConnection:
        """A new connection, for the caller alone."""
        connection = http.client.HTTPConnection(self.host, self.port, timeout=self.timeout)
        try:
            connection.connect()
        except OSError as error:
            raise Unreachable(f"{self._name()}: {error}") from error
        connection.sock.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        return connection

    @staticmethod
    def _exchange(connection: http.client.HTTPConnection, method: str, path: str, body: bytes | None, headers: dict[str, str]) -> Reply:
        try:
            connection.request(method, path, body=body, headers=headers)
        except (BrokenPipeError, ConnectionResetError):
            # The service may have refused a body it did not want to read to its end: the refusal is worth reading.
            # Where nothing is there to read, this raises what a stale connection raises.
            response = connection.getresponse()
        else:
            response = connection.getresponse()
        try:
            content = response.read()
        except (OSError, http.client.HTTPException) as error:
            # Part of an answer was seen, so this must not look like a stale connection.
            raise http.client.HTTPException(f"the answer broke off: {error}") from error
        return Reply(response.status, content, {k.lower(): v for k, v in response.getheaders()})

    def _checked(self, method: str, path: str, body: bytes | None) -> Reply:
        reply = self.raw(method, path, body)
        if 200 <= reply.status < 300:
            return reply
        raise problem(reply)


def problem(reply: Reply) -> Exception:
    """The exception that says what a problem document says."""
    try:
        document = json.loads(reply.body)
    except ValueError:
        document = None
    if not isinstance(document, dict):
        return Garbled(f"status {reply.status} without a problem document: {reply.body[:200]!r}")
    listed = document.get("faults") or []
    faults = tuple(
        Fault(str(f.get("pointer", "")), str(f.get("expected", "")), str(f.get("got", "")), f.get("line"))
        for f in listed
        if isinstance(f, dict)
    )
    parts: dict[str, Any] = {
        "status": reply.status,
        "code": str(document.get("code", "")),
        "title": str(document.get("title", "")),
        "detail": str(document.get("detail", "")),
        "faults": faults,
        "document": document,
    }
    if reply.status == 503:
        try:
            wait: float | None = float(reply.headers["retry-after"])
        except (KeyError, ValueError):
            wait = None
        return Busy(retry_after=wait, **parts)
    return Refused(**parts)


def segment(name: str) -> str:
    """A name as one segment of a path."""
    return quote(name, safe="")
