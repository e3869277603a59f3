"""What the fields of a record promise one another: a damaged record is found here, not while it is drawn."""

from __future__ import annotations

from typing import Any

from synth.record.format import Candidate, Record
from synth.record.shape import Departure


def contradictions(record: Record) -> list[Departure]:
    """Promises that are broken, with their paths. The fields themselves have been checked before."""
    found: list[Departure] = []
    cases = record["plant"]["cases"]
    if not cases:
        found.append(Departure("plant.cases", "is empty"))
    for i, case in enumerate(cases):
        if not case["numerator"] or not any(case["denominator"]):
            found.append(Departure(f"plant.cases[{i}]", "has no plant"))
    plant: Any = record["plant"]
    for key in ("poles", "zeros"):
        found.extend(_pairs(plant.get(key, []), f"plant.{key}"))
    for i, requirement in enumerate(record["requirements"]):
        if "span" in requirement and len(requirement["span"]) != 2:
            found.append(Departure(f"requirements[{i}].span", "must have two levels"))
    for i, candidate in enumerate(record["candidates"]):
        found.extend(Departure(f"candidates[{i}].{path}", what) for path, what in _candidate(candidate))
    trade = record.get("trade")
    if trade is not None and len(trade["quantities"]) != 2:
        found.append(Departure("trade.quantities", "must be two"))
    revision = record["revision"]
    moved = (revision["moved"] or {}) if revision is not None else {}
    short = [key for key, pair in moved.items() if len(pair) != 2]
    found.extend(Departure(f"revision.moved.{key}", "must be two values") for key in short)
    return found


def _candidate(candidate: Candidate) -> list[Departure]:
    found: list[Departure] = []
    block = candidate["compensator"]
    if not block["numerator"] or not block["denominator"] or block["denominator"][0] == 0.0:
        found.append(Departure("compensator", "has no proper denominator"))
    factors: Any = block.get("factors", {})
    for key in ("zeros", "poles"):
        found.extend(_pairs(factors.get(key, []), f"compensator.factors.{key}"))
    found.extend(_pairs([m["pole"] for m in candidate.get("modes", [])], "modes"))
    curves: Any = candidate["curves"]
    for name, needed, optional in (("step", ("t", "y"), ("u",)), ("loop", ("w", "gain_db", "phase_deg"), ())):
        columns = curves.get(name, {})
        lengths = {len(columns.get(part, [])) for part in needed}
        lengths |= {len(columns[part]) for part in optional if columns.get(part)}
        if len(lengths) > 1:
            found.append(Departure(f"curves.{name}", "has columns of different lengths"))
        if any(v is None or isinstance(v, str) for v in columns.get(needed[0], [])):
            found.append(Departure(f"curves.{name}.{needed[0]}", "has holes"))
    if min(curves.get("loop", {}).get("w", []), default=1.0) <= 0.0 and not found:
        found.append(Departure("curves.loop.w", "must be above 0"))
    locus = curves["root_locus"]
    for key in ("closed", "poles", "zeros", "points"):
        found.extend(_pairs(locus.get(key, []), f"curves.root_locus.{key}"))
    if any(len(b["re"]) != len(b["im"]) for b in locus.get("branches", [])):
        found.append(Departure("curves.root_locus.branches", "has columns of different lengths"))
    for name, case in candidate["quantities"].get("worst", {}).items():
        if not isinstance(case, dict) or not isinstance(case.get("value"), int | float | str | None):
            found.append(Departure(f"quantities.worst.{name}", "has no value"))
        elif isinstance(case.get("value"), str) and case["value"] not in ("inf", "-inf"):
            found.append(Departure(f"quantities.worst.{name}", "is no number"))
    for name, value in candidate["quantities"].get("nominal", {}).items():
        plain = isinstance(value, int | float) and not isinstance(value, bool)
        if not (plain or value is None or value in ("inf", "-inf")):
            found.append(Departure(f"quantities.nominal.{name}", "is no number"))
    return found


def _pairs(poles: list[list[float]], path: str) -> list[Departure]:
    whole = all(len(p) == 2 for p in poles)
    return [] if whole else [Departure(path, "must be pairs of real and imaginary part")]
