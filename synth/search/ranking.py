"""The order of what is proposed, and which candidates count as different.

Without a preference: worst slack less COMPLEXITY for each tuned value; with one: that quantity on its worst
case, among those that keep the reserve. What meets everything comes first. At most two of one structure; two
are different when abs(ln(C1/C2)) exceeds APART somewhere within a decade of the crossover. Of two that are
not, the better is listed, or the simpler where it is hardly worse.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.requirements import Bound, order
from synth.search.goals import benefit
from synth.search.outcome import Candidate, Task

COMPLEXITY = 0.02
WISH_COMPLEXITY = 1e-3  # of the wish, for each tuned value that the same loop does without
APART = 0.1
A_STRUCTURE = 2
LIST = 5  # second candidates of a structure are added as long as the list is shorter than this ...
MOST = 10  # ... and none beyond this
POOR_FOLLOWER = 10.0  # % of static error
FOLLOWING = ("static_error", "velocity_error", "tracking_area")


def worst_value(candidate: Candidate, quantity: str, sense: str) -> float:
    """The quantity on its worst case; NaN where it is absent on one."""
    for i, m in enumerate(candidate.measures):
        if m.quantity == quantity:
            column = candidate.values[:, i]
            return float(column.max() if sense == "min" else column.min())
    raise KeyError(quantity)


def reaches_little(candidate: Candidate, bounds: tuple[Bound, ...]) -> bool:
    """Its static error exceeds POOR_FOLLOWER and the sheet does not bound it."""
    if any(b.measure.quantity in FOLLOWING and b.side == "max" for b in bounds):
        return False
    if any(b.measure.quantity == "final_value" for b in bounds):
        return False
    return worst_value(candidate, "static_error", "min") > POOR_FOLLOWER


def ranked(task: Task, found: list[Candidate]) -> list[Candidate]:
    """Best first, each with the words that explain its place."""
    wish = task.prefer
    if wish is None or wish.measure is None:
        return _by_slack(task, found)
    worst = _wish_values(task, found)
    good = np.where(np.isnan(worst), -np.inf, -worst if wish.sense == "min" else worst)
    fit = [i for i, c in enumerate(found) if c.meets_all and c.worst_slack >= wish.reserve]
    rest = [c for i, c in enumerate(found) if i not in fit]
    if fit and not np.isfinite(good[fit]).any():  # what none has tells none from another
        none = f"no candidate has a finite {wish.measure.row.name}"
        return [replace(c, ranked=f"{c.ranked}; {none}") for c in _by_slack(task, found)]
    fit.sort(key=lambda i: (-good[i], -found[i].worst_slack))
    out = []
    for i in fit:
        words = f"{wish.measure.row.name} {worst[i]:.4g}"
        if wish.reserve:
            words += f", with the reserve of {100.0 * wish.reserve:g} % kept"
        out.append(replace(found[i], ranked=words))
    short = f"worst slack below the reserve of {100.0 * wish.reserve:g} %"
    for c in _by_slack(task, rest):
        out.append(replace(c, ranked=f"{c.ranked}; {short}") if c.meets_all else c)
    return out


def _wish_values(task: Task, found: list[Candidate]) -> FloatArray:
    """(N,) the preferred quantity on its worst case, NaN where it is absent on one."""
    wish = task.prefer
    if wish is None or wish.measure is None:
        raise ValueError("the sheet prefers nothing")
    columns = np.array([c.values[:, c.measures.index(wish.measure)] for c in found])
    out: FloatArray = columns.max(axis=1) if wish.sense == "min" else columns.min(axis=1)
    return out


def _by_slack(task: Task, found: list[Candidate]) -> list[Candidate]:
    if not found:
        return []
    handicap = np.array([COMPLEXITY * len(c.parameters) for c in found])
    rows = np.array(
        [np.where(np.isfinite(w := c.worst_by_requirement()), w, np.sign(w) * 1e9) for c in found]
    )
    meets = np.array([c.meets_all for c in found])
    # what meets nothing is ordered by how near it comes, simplicity counts for nothing there
    places = order(rows, np.where(meets, handicap, 0.0))
    poor = np.array([c.meets_all and reaches_little(c, task.bounds) for c in found])
    group = np.where(~meets, 2, np.where(poor, 1, 0))
    out = []
    for g in (0, 1, 2):
        for i in places:
            if group[i] == g:
                out.append(replace(found[i], ranked=_words(found[i], g)))
    return out


def _words(c: Candidate, group: int) -> str:
    tuned = len(c.parameters)
    if group == 2:
        return f"closest approach, worst slack {c.worst_slack:.3f}"
    score = c.worst_slack - COMPLEXITY * tuned
    words = (
        f"worst slack {c.worst_slack:.3f} less {COMPLEXITY * tuned:.2f} for {tuned} tuned values: {score:.3f}"
    )
    if tuned == 1:
        words = words.replace("1 tuned values", "one tuned value")
    if group == 1:
        words += "; after the others, since its static error exceeds 10 %"
    return words


def frequencies(candidate: Candidate, fallback: float) -> FloatArray:
    """A decade each way round the crossover on the nominal case [rad/s]; round the bandwidth, then round
    `fallback`, where there is none."""
    for quantity in ("crossover", "bandwidth"):
        w = candidate.values[0, [m.quantity for m in candidate.measures].index(quantity)]
        if np.isfinite(w) and w > 0.0:
            break
    else:
        w = fallback
    out: FloatArray = w * 10.0 ** np.linspace(-1.0, 1.0, 81)
    return out


def different(a: Candidate, b: Candidate, fallback: float) -> bool:
    """Whether abs(ln(C_a/C_b)) exceeds APART within a decade of the crossover of a."""
    w = frequencies(a, fallback)
    with np.errstate(divide="ignore", invalid="ignore"):
        distance = np.abs(np.log(_response(a, w) / _response(b, w)))
    return bool(np.any(distance > APART))


def _response(c: Candidate, w: FloatArray) -> ComplexArray:
    out: ComplexArray = np.polyval(c.numerator, 1j * w) / np.polyval(c.denominator, 1j * w)
    return out


def chosen(task: Task, found: list[Candidate], fallback: float) -> list[Candidate]:
    """The list to report, in order: what is best of every structure, then seconds of a structure, all
    different.

    Where something meets everything, only such are listed; else the closest approaches that stabilise every
    case. Where a wish or the closest approach is what counts, a structure is listed with the best it has or
    not at all: where that best is the loop of another one, what it has besides would pass for its best.
    """
    queue = ranked(task, found)
    met = any(c.meets_all for c in queue)
    queue = [c for c in queue if (c.meets_all if met else c.stable.all())]
    distinct = _distinct(task, queue, fallback)
    at_its_best = not met or (task.prefer is not None and task.prefer.measure is not None)
    best: dict[str, Candidate] = {}
    for c in queue if met else sorted(queue, key=lambda c: -c.worst_slack):
        best.setdefault(c.structure, c)
    picked: list[int] = []
    names: list[str] = []
    for i, c in enumerate(distinct):  # the best of each structure
        if c.structure not in names and (c is best[c.structure] or not at_its_best):
            picked.append(i)
            names.append(c.structure)
    for least in (1, 0) if met else (1,):  # then seconds, as long as the list is short
        for i, c in enumerate(distinct):
            if i not in picked and len(picked) < LIST and least <= names.count(c.structure) < A_STRUCTURE:
                picked.append(i)
                names.append(c.structure)
    return [distinct[i] for i in sorted(picked)][:MOST]


def best_of(task: Task, mine: list[Candidate]) -> Candidate:
    """What stands for a structure: the first of what meets everything, else what comes nearest."""
    if any(c.meets_all for c in mine):
        return ranked(task, mine)[0]
    return max(mine, key=lambda c: (bool(c.stable.all()), c.worst_slack))


def _distinct(task: Task, queue: list[Candidate], fallback: float) -> list[Candidate]:
    """Without what is the same loop as another that is better, or simpler and hardly worse: a second name for
    it adds nothing. The order stays."""
    kept: list[int] = []
    for i in np.argsort(-_worth(task, queue), kind="stable"):
        if all(different(queue[j], queue[i], fallback) for j in kept):
            kept.append(int(i))
    return [queue[i] for i in sorted(kept)]


def _worth(task: Task, queue: list[Candidate]) -> FloatArray:
    """(N,) what a candidate is worth when two are the same loop: what the queue goes by, less something for
    each tuned value; its place in the queue where simplicity counts in that already."""
    tuned = np.array([float(len(c.parameters)) for c in queue])
    slack = np.array([c.worst_slack for c in queue])
    wish = task.prefer
    if not any(c.meets_all for c in queue):
        return slack - COMPLEXITY * tuned
    if wish is None or wish.measure is None:
        return -np.arange(float(len(queue)))
    gain = benefit(wish.measure, wish.sense, _wish_values(task, queue)) - WISH_COMPLEXITY * tuned
    out: FloatArray = np.where(slack >= wish.reserve, gain, -1e3 + slack - COMPLEXITY * tuned)
    return out
