"""Client of Underfoot, the reference solver for legged robots on ground that gives."""

from . import build, limits, tasks
from .answer import Answer, Comparison, Dynamics, FrameTerms, Sole, Task
from .audit import Audit, Hypothesis
from .batch import Batch, Line
from .client import Client, Model
from .errors import Busy, Fault, Garbled, NotFinite, Refused, UnderfootError, Unreachable
from .identified import Identification, IdentifiedSole, IdentifiedStance, Parameter

__all__ = [
    "Answer",
    "Audit",
    "Batch",
    "Busy",
    "Client",
    "Comparison",
    "Dynamics",
    "Fault",
    "FrameTerms",
    "Garbled",
    "Hypothesis",
    "Identification",
    "IdentifiedSole",
    "IdentifiedStance",
    "Line",
    "Model",
    "NotFinite",
    "Parameter",
    "Refused",
    "Sole",
    "Task",
    "UnderfootError",
    "Unreachable",
    "build",
    "limits",
    "tasks",
]
