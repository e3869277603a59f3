"""The search: a task in, ranked candidates and reasons out."""

from synth.search.outcome import (
    Aim,
    Candidate,
    Fragility,
    FrontPoint,
    Outcome,
    Price,
    Progress,
    Rejection,
    Scan,
    Settings,
    Task,
)
from synth.search.propose import propose, rescore

__all__ = [
    "Aim",
    "Candidate",
    "Fragility",
    "FrontPoint",
    "Outcome",
    "Price",
    "Progress",
    "Rejection",
    "Scan",
    "Settings",
    "Task",
    "propose",
    "rescore",
]
