"""Many states in one exchange: lines go out on a thread of their own while answers are read, in order.

The first line holds what all others share. Nothing is kept: a batch of any length needs the memory of a few lines, for
where answers are not taken the service stops reading, and then the thread that sends waits.
"""

from __future__ import annotations

import http.client
import json
import socket
import threading
from dataclasses import dataclass, field
from types import TracebackType
from typing import Any, Callable, Iterable, Iterator, Mapping

from .errors import Fault, Garbled, Refused, Unreachable
from .transport import Reply, Transport, plain, problem


@dataclass(frozen=True)
class Line:
    """What came back for one line: an answer, or why it was refused."""

    number: int
    """Number of the line in what was sent, from 1; the first line after the template is 2."""
    id: Any
    """The `id` that was sent with it; None where there was none."""
    answer: Mapping[str, Any] | None
    """The document, or the members of it that were asked for; None where the line was refused."""
    problem: Mapping[str, Any] | None = field(repr=False, default=None)
    """The problem document of a refused line."""

    @property
    def faults(self) -> tuple[Fault, ...]:
        """Offending members of a refused line; pointers lead into the line, `/template/...` into what all share."""
        listed = (self.problem or {}).get("faults", ())
        return tuple(Fault(f["pointer"], f["expected"], f["got"], f.get("line")) for f in listed)


class Batch:
    """A batch under way: iterate over it once; `summary` is there afterwards. Closing it early calls off the rest."""

    def __init__(self, transport: Transport, head: Mapping[str, Any], lines: Iterable[Mapping[str, Any]], retry: Callable[[Refused], bool]) -> None:
        self.summary: Mapping[str, Any] | None = None
        """Counts of what became of the lines, once all were read; `ended` says whether the service saw all of them."""
        self._transport = transport
        self._failure: BaseException | None = None
        first = _line(head)
        try:
            self._connection, self._response = self._open(first)
        except Refused as refused:
            if not retry(refused):
                raise
            self._connection, self._response = self._open(first)
        # The socket is kept beside the connection, which forgets it when the response closes.
        self._socket = self._connection.sock
        self._sender = threading.Thread(target=self._send, args=(lines,), daemon=True)
        self._sender.start()
        self._answers = self._read()

    def __iter__(self) -> Iterator[Line]:
        return self._answers

    def __enter__(self) -> Batch:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        self.close()

    def close(self) -> None:
        """Hangs up; the service calls off what runs."""
        self._answers.close()
        self._hang_up()

    def _open(self, first: bytes) -> tuple[http.client.HTTPConnection, http.client.HTTPResponse]:
        """Sends the first line and waits for the head of the response, so that a refused batch takes none of the lines."""
        connection = self._transport.fresh()
        try:
            connection.putrequest("POST", "/v1/batch")
            connection.putheader("Content-Type", "application/x-ndjson")
            connection.putheader("Transfer-Encoding", "chunked")
            connection.endheaders()
            connection.sock.sendall(_chunk(first))
            response = connection.getresponse()
            if response.status == 200:
                return connection, response
            reply = Reply(response.status, response.read(), {k.lower(): v for k, v in response.getheaders()})
        except (OSError, http.client.HTTPException) as error:
            connection.close()
            raise Unreachable(f"the batch could not be opened: {error}") from error
        connection.close()
        raise problem(reply)

    def _send(self, lines: Iterable[Mapping[str, Any]]) -> None:
        try:
            for line in lines:
                self._socket.sendall(_chunk(_line(line)))
            self._socket.sendall(b"0\r\n\r\n")
        except OSError:
            # The reading side sees the same end, and says it.
            pass
        except BaseException as error:  # noqa: BLE001 - whatever the caller's own lines raise is raised where they are read
            self._failure = error
            self._hang_up()

    def _read(self) -> Iterator[Line]:
        try:
            while True:
                text = self._line_of_response()
                if self._failure is not None:
                    raise self._failure
                if not text.endswith(b"\n"):
                    raise Unreachable("the batch broke off before its summary")
                document = _document(text)
                if "summary" in document:
                    self.summary = document["summary"]
                    return
                yield Line(document["line"], document["id"], document.get("answer"), document.get("problem"))
        finally:
            self._hang_up()

    def _line_of_response(self) -> bytes:
        try:
            return self._response.readline()
        except (OSError, ValueError, http.client.HTTPException) as error:
            if self._failure is not None:
                raise self._failure from None
            raise Unreachable(f"the batch broke off: {error}") from error

    def _hang_up(self) -> None:
        try:
            self._socket.shutdown(socket.SHUT_RDWR)
        except OSError:
            # Closed already, by either side.
            pass
        # From the sending thread the response is left alone: the reading one may stand in the midst of it.
        if threading.current_thread() is not self._sender:
            self._response.close()
            self._connection.close()


def _line(document: Mapping[str, Any]) -> bytes:
    return json.dumps(plain(dict(document)), allow_nan=False, separators=(",", ":")).encode() + b"\n"


def _chunk(data: bytes) -> bytes:
    return f"{len(data):x}\r\n".encode() + data + b"\r\n"


def _document(text: bytes) -> Mapping[str, Any]:
    try:
        document = json.loads(text)
    except ValueError as error:
        raise Garbled(f"a line of the batch is not JSON: {error}") from error
    if not isinstance(document, dict) or not ("summary" in document or {"line", "id"} <= document.keys()):
        raise Garbled(f"a line of the batch has not the form this client knows: {text[:200]!r}")
    return document
