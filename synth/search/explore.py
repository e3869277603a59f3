"""The outer layer, by Optuna: where to send the polish on sheets on which starts and polish alone may miss a
basin.

One study a structure. A trial is a centre in search coordinates; it is scored as a batch of points round it
and polished a few iterations, all studies in lockstep. What the campaign knows already is handed over as
finished trials. Studies live in memory, or in a storage from which they are resumed, by several machines at
once if need be.

Optuna is imported here alone, and only when something is explored: it costs more time to load than most
sheets take to search. Sampler: J. Bergstra, R. Bardenet, Y. Bengio and B. Kégl, "Algorithms for
hyper-parameter optimization", NIPS 24 (2011), in Optuna's multivariate form.
"""

from __future__ import annotations

import hashlib
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from synth.errors import Fault, InputError
from synth.search.archive import Rows, distinct, joined
from synth.search.campaign import Campaign
from synth.search.journal import LOCKS, Lock, mend
from synth.search.outcome import Task
from synth.search.polish import Pace, polish
from synth.search.starts import halton

if TYPE_CHECKING:
    import optuna

BATCH = 8  # points a trial
SPREAD = 0.5  # of them round the centre, in every coordinate
PACE = Pace(radius=0.3, iterations=6, least=1e-3, halve=(2, 4), field=2)
KNOWN = 60  # scored rows a study is told of before it begins
ASKS = 3  # trials a structure asked for together
REACH = 8.0  # ln, how far beyond what is known a coordinate may go


def explore(campaign: Campaign, numbers: list[int], trials: int) -> int:
    """Explore these structures with `trials` trials in all; what is found joins their standings. Returns the
    number of trials told."""
    with _quiet():
        try:
            return _explore(campaign, numbers, trials)
        except OSError as error:  # a journal that cannot be written to any more
            raise _unusable(error) from None


def _explore(campaign: Campaign, numbers: list[int], trials: int) -> int:
    studies = {n: _study(campaign, n) for n in numbers}
    earlier = [rows for n, study in studies.items() if (rows := _best_of(campaign, n, study)) is not None]
    if earlier:  # a resumed study: begin where it stood
        campaign.polish_in(joined(earlier), Pace(radius=0.1, halve=()))
    told = 0
    while told < trials and not campaign.halted():
        asked: list[tuple[int, Any]] = []
        for n in _turns(campaign, numbers):
            for _ in range(ASKS):
                if told + len(asked) < trials:
                    asked.append((n, studies[n].ask()))
        centres = joined([_centre(campaign, n, trial) for n, trial in asked])
        batches = _round(centres, campaign, told)
        owner = np.repeat(np.arange(len(asked)), BATCH)
        first = campaign.objective.score(batches).guide()
        picks = [
            np.flatnonzero(owner == k)[np.argsort(-first[owner == k], kind="stable")[:3]]
            for k in range(len(asked))
        ]
        chosen = np.concatenate(picks)
        done = polish(campaign.objective, batches.take(chosen), pace=PACE, stop=campaign.halted)
        for k, (n, trial) in enumerate(asked):
            value = float(done.merit[owner[chosen] == k].max())
            studies[n].tell(trial, value)
        campaign.record(done)
        told += len(asked)
    tops = [s.tops.take(np.array([0])) for n in numbers if (s := campaign.standings[n]).tops is not None]
    if tops:
        campaign.polish_in(joined(tops), Pace(radius=0.05, halve=()))
    for n in numbers:
        campaign.standings[n].judge()
    return told


def _turns(campaign: Campaign, numbers: list[int]) -> list[int]:
    """Effort between structures: the more promising half is asked twice."""
    best = sorted(numbers, key=lambda n: -campaign.standings[n].best)
    return best + best[: (len(best) + 1) // 2]


def _box(campaign: Campaign, n: int) -> tuple[list[str], list[float], list[float]]:
    """Name and range of every search coordinate: its own range, or what the plant's scales suggest."""
    low, high = campaign.objective.boxes[n]
    names = [p.key for p in campaign.task.structures[n].parameters]
    return (
        names,
        [float(b) if np.isfinite(b) else -REACH for b in low],
        [float(b) if np.isfinite(b) else REACH for b in high],
    )


def _centre(campaign: Campaign, n: int, trial: Any) -> Rows:
    names, low, high = _box(campaign, n)
    x = [trial.suggest_float(k, a, b) for k, a, b in zip(names, low, high, strict=True)]
    sign = trial.suggest_categorical("sign", list(campaign.standings[n].signs))
    origin = campaign.origin("a trial of the outer exploration")
    return campaign.objective.rows_at(n, np.array([x]), float(sign), origin)


def _round(centres: Rows, campaign: Campaign, salt: int) -> Rows:
    """BATCH points round each centre, the centre among them."""
    count, width = centres.x.shape
    u = halton(BATCH, width, campaign.settings.seed * 131 + salt) - 0.5
    u[0] = 0.0
    x = centres.x[:, None, :] + 2.0 * SPREAD * u[None, :, :]
    rows = centres.take(np.repeat(np.arange(count), BATCH)).at(x.reshape(-1, width))
    for n in np.unique(rows.structure):
        index = rows.structure == n
        low, high = campaign.objective.boxes[int(n)]
        p = len(low)
        rows.x[index, :p] = np.clip(rows.x[index, :p], low, high)
        rows.x[index, p:] = 0.0
    return rows


def _study(campaign: Campaign, n: int) -> optuna.Study:
    """The study of one structure; a fresh one is told the best of what the campaign has scored."""
    import optuna

    name = f"synth-{fingerprint(campaign.task)}-{campaign.task.structures[n].name}"
    sampler = optuna.samplers.TPESampler(
        multivariate=True, seed=campaign.settings.seed * 17 + n, n_startup_trials=10
    )
    storage = storage_of(campaign.settings.study)
    try:
        study = optuna.create_study(
            study_name=name, storage=storage, sampler=sampler, direction="maximize", load_if_exists=True
        )
        if not study.trials:
            study.add_trials(_known(campaign, n))
    except Exception as error:  # whatever the driver raises may quote the URL, and with it a password
        raise _unusable(error) from None
    return study


def _known(campaign: Campaign, n: int) -> list[Any]:
    import optuna

    names, low, high = _box(campaign, n)
    rows, worst, _ = campaign.objective.remembered(n)
    best = distinct(rows, np.clip(worst, -30.0, 1.0), KNOWN, 0.3)
    spaces: dict[str, Any] = {
        k: optuna.distributions.FloatDistribution(a, b) for k, a, b in zip(names, low, high, strict=True)
    }
    spaces["sign"] = optuna.distributions.CategoricalDistribution(list(campaign.standings[n].signs))
    out = []
    for i in best:
        x = rows.x[i, : len(names)]
        inside = all(a <= v <= b for v, a, b in zip(x, low, high, strict=True))
        if inside and int(rows.sign[i]) in campaign.standings[n].signs:
            values: dict[str, Any] = {k: float(v) for k, v in zip(names, x, strict=True)}
            values["sign"] = int(rows.sign[i])
            least = float(np.maximum(worst[i], -30.0))
            out.append(optuna.trial.create_trial(params=values, distributions=spaces, value=least))
    return out


def _best_of(campaign: Campaign, n: int, study: optuna.Study) -> Rows | None:
    """The best three centres that a storage remembers from earlier runs."""
    if campaign.settings.study is None:
        return None
    names, _, _ = _box(campaign, n)
    done = [t for t in study.trials if t.value is not None]
    done.sort(key=lambda t: -float(t.value or -np.inf))
    parts = []
    for t in done[:3]:
        x = np.array([[t.params[k] for k in names]])
        origin = campaign.origin("an earlier exploration, resumed")
        parts.append(campaign.objective.rows_at(n, x, float(t.params["sign"]), origin))
    return joined(parts) if parts else None


def fingerprint(task: Task) -> str:
    """Sixteen hexadecimal digits that stand for plants and requirements: what a stored study belongs to."""
    text = hashlib.sha256()
    for part in (task.plants.numerator, task.plants.denominator, task.plants.dead_time):
        text.update(np.ascontiguousarray(part).tobytes())
    text.update(repr((task.bounds, task.reference_step)).encode())
    return text.hexdigest()[:16]


def storage_of(url: str | None) -> Any:
    """Optuna's storage for a URL; a path, or journal:PATH, is a journal file; None keeps studies in memory.

    Raises InputError, which never quotes the URL.
    """
    if url is None:
        return None
    from optuna.storages import JournalStorage, RDBStorage
    from optuna.storages.journal import JournalFileBackend, JournalRedisBackend

    try:
        if "://" not in url:
            path = Path(url.removeprefix("journal:")).absolute()
            mend(path)
            lock: Any = Lock(path) if LOCKS else None
            return JournalStorage(JournalFileBackend(str(path), lock))
        if url.startswith("redis"):
            return JournalStorage(JournalRedisBackend(url))
        return RDBStorage(url)
    except Exception as error:
        raise _unusable(error) from None


def _unusable(error: Exception) -> InputError:
    if isinstance(error, InputError):
        return error
    return InputError(
        [
            Fault(
                "the storage of the study cannot be used",
                key="--study",
                given=f"(not shown; the driver says {type(error).__name__})",
                allowed="a file path (journal), or a URL that Optuna takes (sqlite, mysql, redis ...)",
            )
        ]
    )


@contextmanager
def _quiet() -> Iterator[None]:
    """Optuna's news and its notes on experimental features stay off the screen."""
    import optuna

    before = optuna.logging.get_verbosity()
    optuna.logging.set_verbosity(optuna.logging.ERROR)
    try:
        with warnings.catch_warnings():
            warnings.filterwarnings("ignore", module="optuna")
            warnings.simplefilter("ignore", optuna.exceptions.ExperimentalWarning)
            yield
    finally:
        optuna.logging.set_verbosity(before)
