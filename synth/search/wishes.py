"""After the worst slack: the preferred quantity, improved in every structure that keeps the reserve.

A structure that contains another does not end worse than that one, whether or not the other is in the task.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.quantities import Measure
from synth.search.archive import Rows, joined
from synth.search.campaign import Campaign
from synth.search.confirm import MARGIN, confirmed
from synth.search.goals import Goals
from synth.search.outcome import Aim
from synth.search.polish import Pace
from synth.search.wish_starts import fresh, from_archive, from_inside, lifted

WISH_PACE = Pace(radius=0.2, iterations=20, least=1e-4, halve=(3, 6), field=4, planes=4)
AGAIN_PACE = Pace(radius=0.05, iterations=20, least=1e-5, halve=(3,), field=1, second=True, planes=4)
PASSES = 2  # what a structure gains by a simpler one may lift one that contains it in turn


@dataclass(frozen=True, slots=True)
class Wished:
    """rows, what each is best at, the worst slack each has to keep, and the quantity whose digits matter."""

    rows: Rows
    goals: tuple[str, ...]
    need: float
    hold: Measure | None = None


def preferred(campaign: Campaign, earlier: Wished | None = None) -> Wished | None:
    """Improve the preferred quantity in every structure that keeps the reserve; None without a wish.

    earlier : what was found before the last cases came in, to go on from.
    """
    wish = campaign.task.prefer
    if wish is None or wish.measure is None:
        return None
    campaign.enter("preference")
    aim = Aim(wish.measure, wish.sense, wish.reserve + MARGIN)
    parts = [] if earlier is None else [earlier.rows]
    begun = []
    for standing in campaign.standings:
        if standing.best < wish.reserve:
            continue
        if earlier is not None and np.any(earlier.rows.structure == standing.number):
            continue
        begun.append(standing)
        parts.append(standing.first(3))
        parts.append(from_archive(campaign, standing.number, aim))
        parts.append(fresh(campaign, standing, aim))
    if not parts:
        return None
    rows = _kept(campaign, joined(parts), from_inside(campaign, begun, aim), aim)
    for _ in range(PASSES):
        better = lifted(campaign, rows, aim) if len(rows) else None
        if better is None or campaign.halted():
            break
        rows = joined([rows, _kept(campaign, better, None, aim)])
    return Wished(rows, (wish.measure.row.name,) * len(rows), wish.reserve, wish.measure)


def _kept(campaign: Campaign, rows: Rows, nested: Rows | None, aim: Aim) -> Rows:
    """Where the polish for the wish leads, as far as the reserve is kept.

    nested : rows in a field of their own, so that none of the others can drive out what is known to attain
    as much as a simpler structure.
    """
    both = rows if nested is None else joined([rows, nested])
    goals = Goals(
        (aim, aim), np.repeat([0, 1], [len(rows), len(both) - len(rows)]), np.full(len(both), np.nan)
    )
    done, _ = confirmed(campaign, both, goals, WISH_PACE, AGAIN_PACE)
    return done.rows.take(np.flatnonzero(done.finished & done.stable & (done.worst >= aim.reserve - MARGIN)))
