"""Client of Underfoot, the reference solver for legged robots on ground that gives."""

from . import build, limits, tasks
from .answer import Answer, Dynamics, FrameTerms, Sole, Task
from .audit import Audit, Hypothesis
from .client import Client, Model
from .errors import Busy, Fault, Garbled, NotFinite, Refused, UnderfootError, Unreachable

__all__ = [
    "Answer",
    "Audit",
    "Busy",
    "Client",
    "Dynamics",
    "Fault",
    "FrameTerms",
    "Garbled",
    "Hypothesis",
    "Model",
    "NotFinite",
    "Refused",
    "Sole",
    "Task",
    "UnderfootError",
    "Unreachable",
    "build",
    "limits",
    "tasks",
]
