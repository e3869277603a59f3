"""The campaign: structures take turns until each is settled or has used its share.

Rounds of starts and polish for all structures in lockstep; the cases that bind join the active set;
structures whose restarts do not agree get more starts and a short differential evolution. What it finds is
left in `standings`.
"""

from __future__ import annotations

import time
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.quantities import Measure
from synth.rules import starts
from synth.search.archive import Rows, distinct, joined
from synth.search.evolution import evolve
from synth.search.gain_line import Intervals, refined, stable_gains
from synth.search.nesting import nest
from synth.search.objective import Objective
from synth.search.outcome import Progress, ProgressCall, Settings, StopCall, Task
from synth.search.polish import EXACT_PACE, Pace, Polished, polish
from synth.search.standing import FINE, Standing
from synth.search.starts import SOURCES, line, sample


@dataclass(frozen=True, slots=True)
class Effort:
    """What a budget allows: loops scored in all, rounds a structure, starts of a first round, generations."""

    evaluations: int
    rounds: int
    starts: int
    generations: int
    trials: int  # of the outer exploration, each a batch


EFFORTS = {
    "quick": Effort(8_000, 1, 64, 0, 0),
    "normal": Effort(60_000, 4, 96, 12, 40),
    "thorough": Effort(600_000, 8, 192, 20, 400),
}
PICKS = 10
LEAST_GENERATIONS = 4
ROUGH_PACE = Pace(least=1e-3)  # where a stand-in leads: the last digits are not its own
NARROW_ROUNDS = 4  # of a structure that misses by a hair where nothing meets: agreement is not enough there
AGAIN_PACE = Pace(radius=0.15, iterations=10, halve=(3,))
EXACT_TOPS = 2
MOST_CASE_TURNS = 12
# Where another structure meets the sheet, one that stays short of the first is not pursued beyond two rounds,
# and one that stays short of the second not beyond one.
FAR, VERY_FAR = -0.5, -1.5
FAR_CASE_TURNS = 3  # and its cases are looked at this often
HOPELESS = -5.0  # worst search slack beyond which the outer layer is not sent


class Campaign:
    """One search in progress.

    gains     intervals of a bare gain that stabilise every case, exact
    origins   where starts came from (words, publication), by the number that rows carry
    halted    the user or the time limit ended it early
    """

    def __init__(
        self,
        task: Task,
        settings: Settings,
        *,
        extra: tuple[Measure, ...] = (),
        progress: ProgressCall | None = None,
        stop: StopCall | None = None,
    ) -> None:
        self.task, self.settings = task, settings
        self.effort = EFFORTS[settings.budget]
        self.objective = Objective(task, extra)
        self.standings = [Standing(i, len(s.parameters)) for i, s in enumerate(task.structures)]
        self.origins: list[tuple[str, str]] = [(name, "") for name in SOURCES]
        self.gains: Intervals = ()
        if any(s.parameters == 1 for s in self.standings):
            self.gains = stable_gains(task.plants)
        self.begun = time.perf_counter()
        self.interrupted = False
        self.limited = False
        self.explored = 0
        self.stage = "starts"
        self.stages: dict[str, float] = {}
        self._lap = self.begun
        self._progress, self._stop = progress, stop

    # -- time and news

    def halted(self) -> bool:
        """Tell the world how it stands, and whether to stop now."""
        if self._progress is not None:
            self._progress(self.news())
        if self._stop is not None and self._stop():
            self.interrupted = True
        limit = self.settings.time_limit
        if limit is not None and time.perf_counter() - self.begun > limit:
            self.limited = True
        return self.interrupted or self.limited

    def news(self) -> Progress:
        """How it stands."""
        names = [s.name for s in self.task.structures]
        found = {names[s.number]: s.best for s in self.standings if s.guides.size}
        best = max(found.items(), key=lambda item: item[1]) if found else None
        return Progress(
            self.stage,
            self.objective.evaluations,
            self.effort.evaluations,
            time.perf_counter() - self.begun,
            best,
            found,
        )

    def enter(self, stage: str) -> None:
        """Begin a stage; the time since the last one is booked on that one."""
        now = time.perf_counter()
        self.stages[self.stage] = self.stages.get(self.stage, 0.0) + now - self._lap
        self.stage, self._lap = stage, now

    def origin(self, start: str, source: str = "") -> int:
        """The number of a source of starts."""
        if (start, source) not in self.origins:
            self.origins.append((start, source))
        return self.origins.index((start, source))

    # -- the search

    def run(self, seeds: Rows | None = None) -> None:
        """Search every structure to a verdict, as far as the budget goes."""
        with self.objective.approximating():
            self._run(seeds)
        self.settle_exactly()

    def settle_exactly(self) -> None:
        """Where a stand-in led the way, the tops of every structure end in a short exact polish."""
        if not self.objective.delayed:
            return
        self.enter("exact")
        tops = [s.tops.first(EXACT_TOPS) for s in self.standings if s.tops is not None]
        if not tops:
            return
        done = polish(self.objective, joined(tops), pace=EXACT_PACE)
        for n in np.unique(done.rows.structure):
            index = np.flatnonzero(done.rows.structure == n)
            self.standings[int(n)].restate(done.rows.take(index), done.merit[index])

    def _run(self, seeds: Rows | None) -> None:
        numbers = list(range(len(self.standings)))
        self.round(numbers, seeds)
        self.enter("cases")
        self.examine(numbers)
        for _ in range(1, self.effort.rounds):
            met = any(s.best >= 0.0 for s in self.standings)
            open_ = [
                s.number
                for s in self.standings
                if (not s.settled and (not met or s.best > FAR or (s.rounds < 2 and s.best > VERY_FAR)))
                or (not met and s.narrowly and s.rounds < NARROW_ROUNDS)
            ]
            if not open_ or self.halted() or self.objective.evaluations >= self.effort.evaluations:
                break
            self.enter("rounds")
            self.round(open_, None)
            self.enter("cases")
            self.examine(open_)
        self.enter("exploration")
        self._explore()
        self.enter("nesting")
        nest(self)

    def _explore(self) -> None:
        """The outer layer, where the rounds left doubt: hard sheets, and always on a thorough budget."""
        open_ = [s.number for s in self.standings if s.parameters > 1 and self._doubtful(s)]
        room = self.effort.evaluations - self.objective.evaluations
        if not open_ or not self.effort.trials or room <= 0 or self.halted():
            return
        from synth.search.explore import explore

        self.explored = explore(self, open_, self.effort.trials)
        self.enter("cases")
        self.examine(open_)

    def _doubtful(self, standing: Standing) -> bool:
        """Whether more of the same may have missed a basin of this structure.

        On a thorough budget always; else where restarts do not agree, and either the structure has more than
        four parameters, or there are several cases, or nothing meets the sheet.
        """
        if self.settings.budget == "thorough":
            return True
        nothing = all(s.best < 0.0 for s in self.standings)
        if nothing and standing.narrowly:
            return True
        if standing.settled or standing.best <= (HOPELESS if nothing else FAR):
            return False
        several = len(self.objective.case_names) > 1
        return standing.parameters > 4 or several or nothing

    def round(self, numbers: list[int], seeds: Rows | None) -> None:
        """Starts, picks and polish of these structures in lockstep; from the second round on with
        evolution."""
        before = self.objective.evaluations
        parts = [self._starts(n) for n in numbers]
        if seeds is not None and len(seeds):
            parts.append(seeds)
        rows = joined(parts)
        # starts are told apart on one case, the last that was found to bind; the polish minds all that do
        latest = [active[-1:] for active in self.objective.active]
        scores = self.objective.score(rows, latest, hasty=True)
        guide = scores.guide()
        picks = []
        for n in numbers:
            index = np.flatnonzero(rows.structure == n)
            standing = self.standings[n]
            if standing.parameters == 1:
                line_rows, line_guide = refined(self.objective, rows.take(index), guide[index])
                standing.record(line_rows, line_guide, len(line_rows))
                continue
            if standing.rounds == 0:
                alive = scores.stable[index]
                signs = tuple(s for s in (1, -1) if np.any(alive & (rows.sign[index] == s)))
                standing.signs = signs or (1, -1)
            picks.append(index[distinct(rows.take(index), guide[index], PICKS)])
        later = [n for n in numbers if self.standings[n].rounds > 0]
        if picks:
            self.polish_in(rows.take(np.concatenate(picks)), ROUGH_PACE if self.objective.delayed else Pace())
        if later and self.effort.generations and not self.halted():
            self._evolve(later, rows, guide)
        share = (self.objective.evaluations - before) // max(len(numbers), 1)
        for n in numbers:
            self.standings[n].rounds += 1
            self.standings[n].evaluations += share
            self.standings[n].judge()
        self.halted()

    def _starts(self, n: int) -> Rows:
        standing = self.standings[n]
        count = self.effort.starts * min(2**standing.rounds, 8)
        if standing.parameters == 1:
            return line(self.objective, n, self.gains, (1, -1), 2 * count)
        seed = self.settings.seed * 1009 + standing.rounds * 97 + n
        drawn = sample(self.objective, n, count, seed, standing.signs)
        if standing.rounds:
            return drawn
        rules = starts(self.task.plants, self.task.structures[n].name)
        if not rules:
            return drawn
        origin = np.array([self.origin(r.rule, r.source) for r in rules])
        return joined([self.objective.rows_of(n, np.array([r.theta for r in rules]), origin), drawn])

    def polish_in(self, rows: Rows, pace: Pace) -> Polished:
        """Polish rows of any structures and take in where they end."""
        done = polish(self.objective, rows, pace=pace, stop=self.halted)
        self.record(done)
        return done

    def record(self, done: Polished) -> None:
        """Take polished rows into the standings of their structures."""
        for n in np.unique(done.rows.structure):
            index = np.flatnonzero(done.rows.structure == n)
            index = index[np.argsort(~done.finished[index], kind="stable")]
            finished = int(done.finished[index].sum())
            self.standings[int(n)].record(done.rows.take(index), done.merit[index], finished)

    def _evolve(self, numbers: list[int], rows: Rows, guide: FloatArray) -> None:
        """Members: the tops and the best distinct starts; the three best end in a short polish."""
        parts = []
        for n in numbers:
            tops = self.standings[n].tops
            index = np.flatnonzero(rows.structure == n)
            size = 8 * self.standings[n].parameters
            fresh = rows.take(index[distinct(rows.take(index), guide[index], size, 0.05)])
            members = joined([tops.first(3), fresh]) if tops is not None else fresh
            if len(members) >= 4:
                parts.append(members.first(size))
        if not parts:
            return
        rng = np.random.default_rng([self.settings.seed, *[self.standings[n].rounds for n in numbers]])
        dear = max(len(self.objective.active[n]) for n in numbers)  # each member is scored on that many cases
        generations = max(self.effort.generations // dear, min(self.effort.generations, LEAST_GENERATIONS))
        members, score = evolve(
            self.objective, joined(parts), generations=generations, rng=rng, stop=self.halted
        )
        picks = []
        for n in np.unique(members.structure):
            index = np.flatnonzero(members.structure == n)
            picks.append(index[distinct(members.take(index), score[index], 3, 0.05)])
        self.polish_in(members.take(np.concatenate(picks)), Pace(radius=0.1, halve=()))

    # -- plant cases

    def examine(self, numbers: list[int]) -> None:
        """Confirm the best of each structure on all cases; the worst violated case joins its active set, and
        the structure is polished on from its tops."""
        if len(self.objective.case_names) == 1:
            return
        for turn in range(MOST_CASE_TURNS):
            met = any(s.best >= 0.0 for s in self.standings)
            if met and turn >= FAR_CASE_TURNS:
                numbers = [n for n in numbers if self.standings[n].best > FAR]
            changed = self._violated(numbers) if numbers else []
            if not changed:
                break
            self._restart(changed)
            if self.halted():
                break

    def _violated(self, numbers: list[int]) -> list[int]:
        """Structures whose best loses on a case that is not active; that case becomes active."""
        numbers = [n for n in numbers if self.standings[n].tops is not None]
        heads = joined([self.standings[n].first(1) for n in numbers])
        scores = self.objective.score(heads, self.objective.everywhere(), remember=False)
        by_case = scores.search.min(axis=2)
        changed = []
        for i, n in enumerate(numbers):
            worst = int(by_case[i].argmin())
            if by_case[i, worst] < self.standings[n].best - FINE and worst not in self.objective.active[n]:
                self.objective.activate(n, [worst])
                changed.append(n)
        return changed

    def _restart(self, numbers: list[int]) -> None:
        """The active cases changed: what was found is scored anew and polished on."""
        parts = []
        for n in numbers:
            tops = self.standings[n].tops
            if tops is not None:
                parts.append(tops.first(4))
            standing = self.standings[n]
            standing.tops, standing.guides, standing.optima = None, np.zeros(0), []
        self.polish_in(joined(parts), AGAIN_PACE)
        for n in numbers:
            self.standings[n].judge()

    def heads(self) -> tuple[IntArray, Rows, FloatArray]:
        """The best of every structure: its number, its row, its worst search slack on the active cases."""
        found = [s for s in self.standings if s.tops is not None]
        rows = joined([s.first(1) for s in found])
        return np.array([s.number for s in found]), rows, np.array([s.best for s in found])
