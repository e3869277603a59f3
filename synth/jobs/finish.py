"""The end of every run that scores: a second opinion, the order it asks for, the record, and its file."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

from synth.jobs.clock import now
from synth.jobs.opinions import opinions
from synth.jobs.options import Done
from synth.rationale import Said, verdict
from synth.record import Place, write_record
from synth.record.build import Given, build
from synth.search.outcome import Outcome
from synth.spec import Spec

if TYPE_CHECKING:
    from synth.limits import Limit
    from synth.record.format import Link, Revision, Trade


def finish(
    job: str,
    spec: Spec,
    outcome: Outcome,
    *,
    limits: Sequence[Limit],
    place: Place | None,
    said: Said | None = None,
    predecessor: Link | None = None,
    revision: Revision | None = None,
    trade: Trade | None = None,
) -> Done:
    """Verify the candidates, put those that did not agree last, build the record and write it.

    place : where to write, checked before the run; None writes nothing. said : the verdict sentence, made
    here where it is not given.
    """
    if (
        job != "score"
    ):  # what does not stabilise every case is no candidate; its structure is told as rejected
        stable = tuple(c for c in outcome.candidates if c.stable.all())
        outcome = replace(outcome, candidates=stable)
    verified = opinions(spec, outcome)
    order = sorted(range(len(outcome.candidates)), key=lambda i: not _agrees(verified[i]))  # stable
    outcome = replace(outcome, candidates=tuple(outcome.candidates[i] for i in order))
    violated = [limit for limit in limits if limit.violates is not None]
    met = bool(outcome.candidates) and outcome.candidates[0].meets_all
    record = build(
        Given(
            job=job,
            created=now(),
            spec=spec,
            outcome=outcome,
            limits=limits,
            verified=[verified[i] for i in order],
            statement=said or verdict(spec, outcome, () if met else violated),
            predecessor=predecessor,
            revision=revision,
            trade=trade,
        )
    )
    return Done(record, write_record(record, place) if place is not None else None)


def _agrees(opinion: object) -> bool:
    return opinion is None or bool(getattr(opinion, "agrees", True))
