"""What a caller may say about a run, beside the sheet itself."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Literal

if TYPE_CHECKING:
    from synth.record import Record
    from synth.search.outcome import ProgressCall, StopCall

Budget = Literal["quick", "normal", "thorough"]


@dataclass(frozen=True, slots=True)
class Options:
    """Of a job that searches or scores.

    seed, budget  override the sheet's own
    time_limit    [s]; the run then depends on the machine, and its record says so
    record        where the record goes; None: the next number in `records/` beside the sheet
    keep          False writes no record at all
    study         storage of the outer exploration (any URL Optuna takes); never printed, logged or recorded
    trade         two quantities whose trade-off is wanted
    progress      called now and then with how far the search is
    stop          asked now and then; True ends the search and keeps the best so far
    """

    seed: int | None = None
    budget: Budget | None = None
    time_limit: float | None = None
    record: Path | None = None
    keep: bool = True
    study: str | None = None
    trade: tuple[str, str] | None = None
    progress: ProgressCall | None = None
    stop: StopCall | None = None


@dataclass(frozen=True, slots=True)
class Done:
    """What a job hands back: the record, and where it was written (None where it was not)."""

    record: Record
    path: Path | None
