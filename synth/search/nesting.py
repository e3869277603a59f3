"""A structure that contains a simpler one comes out no worse.

Where the simpler one stands higher, its best points are written in the parameters of the larger one and
polished on.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from synth.search.archive import Rows, best_each, joined
from synth.search.embed import embedded
from synth.search.polish import Pace
from synth.search.standing import Standing

if TYPE_CHECKING:
    from synth.search.campaign import Campaign

# By which a simpler structure has to stand higher; the second where a stand-in leads.
LIFT, ROUGH_LIFT = 2e-4, 2e-3
CARRIED = 2  # points of each simpler structure that are written in the larger one
POLISHED = 3  # and of all those, how many a structure polishes
PACE = Pace(radius=0.2, iterations=8, least=1e-3, halve=(2,), field=1)


def nest(campaign: Campaign) -> None:
    """Lift every structure to what those it contains attain.

    Twice, since what a structure gains this way may lift one that contains it in turn.
    """
    for _ in range(2):
        changed = _lifted(campaign)
        if not changed or campaign.halted():
            break
        campaign.examine(changed)


def _lifted(campaign: Campaign) -> list[int]:
    """The structures that came out higher."""
    objective, standings = campaign.objective, campaign.standings
    lift = ROUGH_LIFT if objective.by_stand_in else LIFT
    parts: dict[int, list[Rows]] = {}
    for large in standings:
        for small in standings:
            if large.parameters == 1 or small.tops is None or small.best <= large.best + lift:
                continue
            rows = _carried(campaign, small, large)
            if rows is not None:
                parts.setdefault(large.number, []).append(rows)
    if not parts:
        return []
    before = {n: standings[n].best for n in parts}
    rows = joined([joined(own) for own in parts.values()])
    guide = objective.score(rows).guide()
    campaign.polish_in(rows.take(best_each(rows, guide, POLISHED)), PACE)
    changed = [n for n in parts if standings[n].best > before[n]]
    for n in changed:
        standings[n].judge()
    return changed


def _carried(campaign: Campaign, small: Standing, large: Standing) -> Rows | None:
    """The best of one structure as rows of the other, which is judged from now on where the first one was;
    None where it cannot be."""
    objective = campaign.objective
    rows = embedded(objective, small.first(CARRIED), large.number)
    if rows is not None:
        objective.activate(large.number, objective.active[small.number])
    return rows
