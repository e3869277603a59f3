"""Search a sheet and propose ranked compensators: spec in, record out."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from synth.errors import Fault, InputError, nearest
from synth.jobs.finish import finish
from synth.jobs.options import Done, Options
from synth.limits import assess
from synth.loop.quantities import QUANTITIES, Measure
from synth.record import place_for, plain
from synth.record.format import Trade
from synth.search.outcome import Settings, Task
from synth.spec import Spec, read_spec

if TYPE_CHECKING:
    from synth.limits import Limit
    from synth.search.outcome import Outcome


def propose(spec_path: str | Path, options: Options | None = None) -> Done:
    """Search the sheet; the record of the run, written unless `options.keep` is False.

    InputError for a bad sheet and for a record that could not be written, before anything is searched.
    """
    options = options or Options()
    spec = read_spec(spec_path)
    pair = trade_pair(options.trade)
    place = place_for(Path(spec_path), options.record) if options.keep else None
    limits, outcome = searched(spec, options)
    trade = _trade(spec, options, pair) if pair is not None else None
    return finish("propose", spec, outcome, limits=limits, place=place, trade=trade)


def settings_of(spec: Spec, options: Options, *, impossible: bool = False) -> Settings:
    """The sheet's own settings, overridden by the caller's. Where a limit already proves that nothing meets
    the sheet, a quick search is enough to say what comes nearest."""
    budget = options.budget or ("quick" if impossible else spec.search.budget)
    seed = spec.search.seed if options.seed is None else options.seed
    return Settings(budget=budget, seed=seed, time_limit=options.time_limit, study=options.study)


def searched(spec: Spec, options: Options, seeds: Sequence[Any] = ()) -> tuple[tuple[Limit, ...], Outcome]:
    """The limits of the plant, then the search."""
    from synth.search import propose as search

    if options.study is not None:  # an address that cannot be used is told now, not when the search needs it
        from synth.search.explore import storage_of

        storage_of(options.study)
    limits = assess(spec.cases, spec.bounds, spec.reference_step)
    impossible = any(limit.violates for limit in limits)
    settings = settings_of(spec, options, impossible=impossible)
    return limits, search(Task.of(spec), settings, options.progress, options.stop, seeds=seeds)


def _trade(spec: Spec, options: Options, pair: tuple[Measure, Measure]) -> Trade:
    """The front of two quantities, as a record holds it."""
    from synth.search.tradeoff import tradeoff

    points = tradeoff(Task.of(spec), *pair, settings_of(spec, options), options.progress, options.stop)
    return {
        "quantities": [measure.quantity for measure in pair],
        "points": [
            {
                "structure": p.structure,
                "parameters": dict(p.parameters),
                "first": plain(p.first),
                "second": plain(p.second),
                "worst_slack": plain(p.worst_slack),
            }
            for p in points
        ],
    }


def trade_pair(names: tuple[str, str] | None) -> tuple[Measure, Measure] | None:
    """The two quantities of a trade-off; InputError for names that are none."""
    if names is None:
        return None
    known = [key for key, row in QUANTITIES.items() if row.listed and row.better is not None]
    faults = [
        Fault(
            "unknown quantity",
            key="--trade",
            given=name,
            allowed="two quantities with a good direction, see `synth schema`",
            nearest=nearest(name, known),
        )
        for name in names
        if name not in known
    ]
    if not faults and names[0] == names[1]:
        faults = [Fault("a trade-off is between two quantities", key="--trade", given=",".join(names))]
    if faults:
        raise InputError(faults)
    return Measure(names[0]), Measure(names[1])
