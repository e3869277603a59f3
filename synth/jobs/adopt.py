"""State which candidate goes into service: an adoption beside the record, which stays as it is."""

from __future__ import annotations

from pathlib import Path

from synth.errors import Fault, InputError
from synth.jobs.clock import now
from synth.jobs.show import candidate_of
from synth.record import ADOPTION_FORMAT, Adoption, Candidate, Record, read_record, write_adoption


def adopt(record_path: str | Path, rank: int, note: str | None = None) -> tuple[Adoption, Path]:
    """Adopt the candidate of that rank; returns the adoption and where it was written.

    InputError where there is no such candidate, and without a note where the candidate does not meet
    everything, comes from an interrupted search, or its second opinion disagreed.
    """
    stored = read_record(Path(record_path))
    candidate = candidate_of(stored.record, rank, str(record_path), "RANK")
    doubts = doubts_of(stored.record, candidate)
    if doubts and not (note and note.strip()):
        raise InputError(
            Fault(
                f"not without a reason: {doubt}", file=str(record_path), allowed='--note "why all the same"'
            )
            for doubt in doubts
        )
    adoption: Adoption = {
        "format": ADOPTION_FORMAT,
        "created": now(),
        "record": {"file": stored.path.name, "sha256": stored.sha256},
        "rank": rank,
        "structure": candidate["structure"],
        "parameters": dict(candidate["parameters"]),
        "units": {key: candidate.get("units", {}).get(key, "") for key in candidate["parameters"]},
        "compensator": candidate["compensator"],
        "verdict": "met" if candidate["meets_all"] else "not met",
        "note": note,
    }
    return adoption, write_adoption(adoption, stored.path)


def doubts_of(record: Record, candidate: Candidate) -> list[str]:
    """What stands against adopting a candidate without a word."""
    out = []
    if not candidate["meets_all"]:
        out.append(f"candidate {candidate['rank']} does not meet everything")
    if record["search"]["interrupted"]:
        out.append("the search was interrupted")
    verified = candidate["verified"]
    if verified is not None and not verified["agrees"]:
        out.append(f"the second opinion on candidate {candidate['rank']} disagreed")
    return out
