"""The plant was revised: the earlier candidates as they are on the new plant, advice for the one in service,
and a search from there."""

from __future__ import annotations

import os
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from synth.errors import Fault, InputError
from synth.jobs.finish import finish
from synth.jobs.options import Done, Options
from synth.jobs.propose import searched
from synth.jobs.scoring import on_cases_of, scored, with_worst_inside
from synth.rationale import GIVEN, decide
from synth.record import (
    Adoption,
    Earlier,
    Place,
    Record,
    Stored,
    StoredAdoption,
    newest_adoption,
    newest_record,
    number,
    place_for,
    plain,
    predecessor_of,
    read_record,
)
from synth.record.candidate import binding_part
from synth.record.changes import changes
from synth.record.clean import clean
from synth.record.format import Compensator, Revision
from synth.record.sheet import plant_part, requirement_part, spec_part
from synth.search.outcome import Candidate, Outcome
from synth.spec import Spec, read_spec

MOST_ANCESTORS = 100  # how far back an adoption is looked for


@dataclass(frozen=True, slots=True)
class InService:
    """The compensator the advice is about: the adopted one, or else the earlier first candidate."""

    about: str  # who it is, in words
    adoption: StoredAdoption | None
    rank: int
    structure: str
    parameters: dict[str, float]
    compensator: Compensator
    slack_before: float


def rerun(spec_path: str | Path, against: str | Path | None = None, options: Options | None = None) -> Done:
    """The record of a rerun; it names its predecessor.

    against : a record; None takes the newest one of that sheet. InputError where there is none.
    """
    options = options or Options()
    spec = read_spec(spec_path)
    before = read_record(Path(against)) if against is not None else _newest(Path(spec_path))
    place = place_for(Path(spec_path), options.record) if options.keep else None
    service = in_service(before)
    spec = with_worst_inside(spec, *_polynomials(service.compensator)) if service else spec
    limits, outcome = searched(spec, options, seeds=_seeds(before.record))
    seen = on_cases_of(spec, outcome)
    revision = _revision(seen, outcome, before, service)
    return finish(
        "rerun",
        spec,
        outcome,
        limits=limits,
        place=place,
        predecessor={"file": _relative(before.path, place, Path(spec_path)), "sha256": before.sha256},
        revision=revision,
    )


def _newest(spec_path: Path) -> Stored:
    found = newest_record(spec_path)
    if found is None:
        raise InputError(
            [
                Fault(
                    f"there is no earlier record of {spec_path.name} to rerun",
                    file=str(spec_path.parent / "records"),
                    allowed="run `synth propose` first, or name a record with --against",
                )
            ]
        )
    return found


def in_service(before: Stored) -> InService | None:
    """The newest adoption of the record or of those before it, else its first candidate; None where it has
    none."""
    stored: Stored | None = before
    for _ in range(MOST_ANCESTORS):
        if stored is None:
            break
        adoption = newest_adoption(stored)
        if adoption is not None:
            return _adopted(adoption, stored.record)
        stored = predecessor_of(stored)
    if not before.record["candidates"]:
        return None
    first = before.record["candidates"][0]
    if before.record.get("job") == "score":
        about = "the compensator scored before (none was adopted)"
    else:
        about = f"the earlier first candidate (a {first['structure']}; none was adopted)"
    return InService(
        about,
        None,
        first["rank"],
        first["structure"],
        first["parameters"],
        first["compensator"],
        number(first["worst_slack"]),
    )


def _adopted(stored: StoredAdoption, record: Record) -> InService:
    adoption: Adoption = stored.adoption
    slack = next((c["worst_slack"] for c in record["candidates"] if c["rank"] == adoption["rank"]), None)
    return InService(
        f"the adopted {'compensator' if adoption['structure'] == GIVEN else adoption['structure']}",
        stored,
        adoption["rank"],
        adoption["structure"],
        adoption["parameters"],
        adoption["compensator"],
        number(slack),
    )


def _polynomials(compensator: Compensator) -> tuple[list[float], list[float]]:
    return compensator["numerator"], compensator["denominator"]


def _seeds(record: Record) -> list[tuple[str, list[float]]]:
    return [(c["structure"], list(c["parameters"].values())) for c in record["candidates"] if c["parameters"]]


def _revision(seen: Spec, outcome: Outcome, before: Stored, service: InService | None) -> Revision:
    """What changed, how the earlier candidates do now, and the advice."""
    new = plant_part(seen, None), [requirement_part(b) for b in seen.bounds], spec_part(seen)
    old = before.record["plant"], before.record["requirements"], before.record["spec"]
    earlier = [
        _earlier(_again(seen, c["structure"], c["parameters"], c["compensator"]), c["rank"], c["worst_slack"])
        for c in before.record["candidates"]
    ]
    part: Revision = {
        "advice": "restructure" if outcome.verdict == "met" else "relax",
        "about": "",
        "changes": changes(old, new),
        "adopted": None,
        "earlier": earlier,
        "moved": None,
        "evidence": [],
        "successor": 1 if outcome.candidates else None,
        "adoption": None,
    }
    if service is None:
        return part
    untouched = _again(seen, service.structure, service.parameters, service.compensator)
    decision = decide(
        seen, outcome, untouched, slack_before=service.slack_before, parameters=service.parameters
    )
    part["advice"] = decision.advice
    part["about"] = service.about
    part["moved"] = decision.moved
    part["evidence"] = [{"text": text, "facts": clean(facts)} for text, facts in decision.evidence]
    part["successor"] = None if decision.successor is None else decision.successor + 1
    if service.adoption is not None:
        part["adopted"] = _earlier(untouched, service.rank, plain(service.slack_before))
        part["adoption"] = {"file": service.adoption.path.name, "sha256": service.adoption.sha256}
    return part


def _again(seen: Spec, structure: str, parameters: dict[str, float], compensator: Compensator) -> Candidate:
    """An earlier compensator, untouched, on the new plant."""
    return scored(seen, *_polynomials(compensator), structure=structure, parameters=parameters)


def _earlier(found: Candidate, rank: int | None, was: Any) -> Earlier:
    return {
        "rank": rank,
        "structure": found.structure,
        "meets_all": found.meets_all,
        "worst_slack": plain(found.worst_slack),
        "binding": binding_part(found.binding),
        "was": was,
    }


def _relative(path: Path, place: Place | None, spec_path: Path) -> str:
    """The predecessor's place as seen from the new record: no path of this machine in it."""
    folder = place.folder if place is not None else spec_path.parent / "records"
    return Path(os.path.relpath(path, folder)).as_posix()
