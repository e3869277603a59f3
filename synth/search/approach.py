"""How near a structure comes that does not meet the sheet, in the slack that is reported.

The search steers by a stand-in for a settling time that is not met: of the same sign, but largest elsewhere
than the settling time itself is shortest. What is to be told is the exact worst slack. The archive holds it
for all that was scored, for nothing; where that shows that the stand-in led elsewhere, or nothing meets the
sheet, what it holds is polished on.
"""

from __future__ import annotations

import numpy as np

from synth.search.archive import Rows, best_each, distinct, joined
from synth.search.campaign import Campaign
from synth.search.polish import Pace, polish
from synth.search.standing import AGREE, Standing

BEST = 200  # scored rows of a structure that are looked through
PICKS = 4
WORTHWHILE = -1.0  # of slack: what is further off is far off, wherever exactly
PACE = Pace(radius=0.15, iterations=8, least=5e-4, halve=(2, 4), field=2)


def nearest(campaign: Campaign) -> Rows | None:
    """Of every structure that does not meet the sheet, the rows with the best exact worst slack; None where
    all meet it.

    Where there is dead time the slacks are those of the rational stand-in.
    """
    objective = campaign.objective
    short = [s for s in campaign.standings if s.tops is not None and s.best < 0.0]
    nothing = len(short) == len(campaign.standings)
    told: list[Rows] = []
    polished: list[Rows] = []
    for standing in short:
        rows, worst = _scored(campaign, standing)
        led_elsewhere = standing.best > WORTHWHILE and worst > standing.best + AGREE
        if len(rows) and (nothing or led_elsewhere):
            polished.append(rows)
        else:
            told.append(rows.first(1))
    if polished:
        with objective.approximating(), objective.literally():
            done = polish(objective, joined(polished), pace=PACE, stop=campaign.halted)
        told.append(done.rows.take(best_each(done.rows, done.worst, 2)))
    return joined(told) if told else None


def _scored(campaign: Campaign, standing: Standing) -> tuple[Rows, float]:
    """The best scored rows of a structure on all the cases that are active for it, distinct, and the worst
    slack of the best."""
    rows, worst, _ = campaign.objective.remembered(standing.number)
    order = np.argsort(-worst, kind="stable")[:BEST]
    order = order[np.isfinite(worst[order])]
    order = order[distinct(rows.take(order), worst[order], PICKS)]
    return rows.take(order), float(worst.max(initial=-np.inf))
