"""How near a structure comes that does not meet the sheet, in the slack that is reported.

The search steers by a stand-in for a settling time that is not met: of the same sign, but largest elsewhere
than the settling time itself is shortest. What is to be told is the exact worst slack. The archive holds it
for all that was scored, for nothing; where no structure meets the sheet, what it holds is polished on.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import IntArray
from synth.search.archive import Rows, distinct, joined
from synth.search.campaign import Campaign
from synth.search.polish import Pace, polish
from synth.search.standing import Standing

BEST = 200  # scored rows of a structure that are looked through
PICKS = 4
PACE = Pace(radius=0.15, iterations=8, least=5e-4, halve=(2, 4), field=2)


def nearest(campaign: Campaign) -> Rows | None:
    """Of every structure that does not meet the sheet, the scored row with the best exact worst slack; None
    where all meet it.

    Where none does, such rows are polished first, and two of each structure are handed back. Where there is
    dead time the slacks are those of the rational stand-in.
    """
    objective = campaign.objective
    short = [s for s in campaign.standings if s.tops is not None and s.best < 0.0]
    if not short:
        return None
    nothing = len(short) == len(campaign.standings)
    parts = [_scored(campaign, s, PICKS if nothing else 1) for s in short]
    rows = joined(parts)
    if not nothing or not len(rows) or campaign.halted():
        return rows
    with objective.approximating(), objective.literally():
        done = polish(objective, rows, pace=PACE, stop=campaign.halted)
    picks: list[IntArray] = []
    for n in np.unique(done.rows.structure):
        index = np.flatnonzero(done.rows.structure == n)
        picks.append(index[np.argsort(-done.worst[index], kind="stable")[:2]])
    return done.rows.take(np.concatenate(picks))


def _scored(campaign: Campaign, standing: Standing, count: int) -> Rows:
    """The best scored rows of a structure, on all the cases that are active for it, distinct."""
    rows, slack, _, cases = campaign.objective.archive.all()
    judged = cases >= len(campaign.objective.active[standing.number])
    worst = np.where(judged & (rows.structure == standing.number), slack.min(axis=1), -np.inf)
    order = np.argsort(-worst, kind="stable")[:BEST]
    order = order[np.isfinite(worst[order])]
    return rows.take(order[distinct(rows.take(order), worst[order], count)])
