"""What can go wrong, as exceptions.

`UnderfootError` is the parent of all of them, so one `except` catches everything this package raises itself.
An answer of status `infeasible` is not an error: it comes back as an `Answer`.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True)
class Fault:
    """One offending member of a refused request."""

    pointer: str
    """Where it is in the request body: a JSON pointer (RFC 6901); empty for the body as a whole."""
    expected: str
    """What the service expected there."""
    got: str
    """What it found."""
    line: int | None = None
    """Line in the text the pointer leads to, from 1, where that text is a URDF."""

    def __str__(self) -> str:
        where = (self.pointer or "(the whole request)") + (f" line {self.line}" if self.line is not None else "")
        return f"{where}: expected {self.expected}, got {self.got}"


class UnderfootError(Exception):
    """Parent of every exception of this package."""


class NotFinite(UnderfootError, ValueError):
    """A NaN or an infinity in the request, found before anything was sent.

    JSON has no such numbers; a request that carries one is a mistake in the caller's own computation.
    """

    def __init__(self, pointer: str, value: object) -> None:
        self.pointer = pointer
        super().__init__(f"{pointer or '(the whole request)'}: {value} is not a finite number")


class Unreachable(UnderfootError, ConnectionError):
    """No complete answer came back: nothing listens there, or the connection broke, or it took too long."""


class Garbled(UnderfootError):
    """Something answered, but not in the form this client knows: another program, or another version."""


class Refused(UnderfootError):
    """The service read the request and refused it (RFC 9457 problem document)."""

    def __init__(self, status: int, code: str, title: str, detail: str, faults: tuple[Fault, ...], document: dict[str, Any]) -> None:
        self.status = status
        """HTTP status."""
        self.code = code
        """Stable short code of the problem."""
        self.title = title
        self.detail = detail
        self.faults = faults
        """Every offending member that was found, with its pointer."""
        self.document = document
        """The problem document as it came."""
        lines = [f"{status} {code}: {title}" + (f" ({detail})" if detail and detail != title else "")]
        lines += [f"  {fault}" for fault in faults]
        super().__init__("\n".join(lines))


class Busy(Refused):
    """503: every worker is taken and the queue is full. Try again after `retry_after` seconds."""

    def __init__(self, *args: Any, retry_after: float | None, **keywords: Any) -> None:
        super().__init__(*args, **keywords)
        self.retry_after = retry_after
        """Seconds the service asks to wait; None where it did not say."""
