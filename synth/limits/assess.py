"""What no compensator can do on a plant, against what a sheet asks for.

Every limit is a theorem for any proper compensator of the loop, with its conditions; a requirement is
called violated only where the best value that the theorem leaves misses it on a case it is judged on.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from synth.limits import dead_time, disturbance, hidden, interpolation, low_frequency, unstable_poles, zeros
from synth.limits.case import CaseView, Finding
from synth.model import PlantCases
from synth.requirements import Bound

SCHOOLS = (hidden, low_frequency, zeros, unstable_poles, interpolation, dead_time, disturbance)


@dataclass(frozen=True, slots=True)
class Limit:
    """One limit of the plant.

    name, statement, source   what it is, the sentence with its numbers, who proved it
    violates  id of the requirement that cannot be met; None where the limit only informs
    facts     the numbers of the statement, and the case they belong to
    relax     {"requirement": id, "to": value in the table's unit}: the least the requirement has to give way;
              None where nothing is violated or no value would do
    """

    name: str
    statement: str
    source: str
    violates: str | None
    facts: dict[str, float | str]
    relax: dict[str, str | float] | None


def assess(cases: PlantCases, bounds: Sequence[Bound], reference_step: float = 1.0) -> tuple[Limit, ...]:
    """Every limit that applies, violated ones first; each on the case that is worst for its requirement."""
    worst: dict[tuple[str, str | None], tuple[Finding, str]] = {}
    for case in cases.cases:
        view = CaseView(case, tuple(b for b in bounds if b.judged_on(case.name)), reference_step)
        for school in SCHOOLS:
            for finding in school.findings(view):
                key = (finding.name, finding.bound.id if finding.bound else None)
                known = worst.get(key)
                if known is None or finding.slack < known[0].slack:
                    worst[key] = (finding, case.name)
    found = [_limit(finding, case) for finding, case in worst.values()]
    merged: dict[tuple[str, str], Limit] = {}
    for limit in found:  # one that only informs is said once, and not beside its violated twin
        key = (limit.name, limit.violates or "")
        merged.setdefault(key, limit)
    broken = {limit.name for limit in merged.values() if limit.violates}
    out = [limit for limit in merged.values() if limit.violates or limit.name not in broken]
    return tuple(sorted(out, key=lambda limit: limit.violates is None))


def _limit(finding: Finding, case: str) -> Limit:
    violated = finding.bound.id if finding.bound is not None and finding.violated else None
    relax: dict[str, str | float] | None = None
    if violated is not None and finding.bound is not None and np.isfinite(finding.best):
        up = finding.bound.side == "max"
        relax = {"requirement": violated, "to": _outward(finding.best, up)}
    return Limit(
        finding.name,
        finding.statement,
        finding.source,
        violated,
        {**finding.facts, "case": case},
        relax,
    )


def _outward(value: float, up: bool) -> float:
    """Four significant digits, rounded so that the requirement can then be met."""
    if value == 0.0:
        return 0.0
    unit = 10.0 ** (np.floor(np.log10(abs(value))) - 3.0)
    steps = value / unit
    whole = np.ceil(steps - 1e-9) if up else np.floor(steps + 1e-9)
    return float(f"{whole * unit:.4g}")
