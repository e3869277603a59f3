"""Random sheets that can be met by construction: a plant of a family, a good compensator for it, and
requirements that are the compensator's own figures, loosened.

Ten families in random units of time and gain. The witness is placed by design coordinates and, for a hard
problem, pushed to a local optimum of its own sheet first (scipy's simplex, nothing of the search), so that
little room is left.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import EVERY_QUANTITY, Measure
from synth.requirements import Bound, numbered, slack_of
from synth.search import Task
from synth.search.scales import response
from synth.structures import REGISTRY, Structure

FAMILIES = (
    "integrating",
    "chain",
    "flex",
    "lag1",
    "lag2",
    "unstable",
    "resonant",
    "zero",
    "double",
    "deadtime",
)
ALWAYS = ("damping_ratio", "overshoot", "settling_time", "bandwidth")
SOMETIMES = (
    "sensitivity_peak",
    "phase_margin",
    "gain_margin",
    "control_peak",
    "static_error",
    "rise_time",
    "noise_gain",
)


@dataclass(frozen=True)
class Problem:
    """task over all structures; the witness that meets it: structure and tuned values."""

    name: str
    task: Task
    structure: str
    theta: np.ndarray


def plant(family: str, rng: np.random.Generator) -> Rational:
    """One plant of a family; time unit 1e-4 to 1e4 s, gain 1e-2 to 1e2."""
    unit, gain = 10.0 ** rng.uniform(-4, 4), 10.0 ** rng.uniform(-2, 2)

    def lag(low: float, high: float) -> np.ndarray:
        return np.array([10.0 ** rng.uniform(np.log10(low), np.log10(high)), 1.0])

    def mode(damping: tuple[float, float], low: float, high: float) -> np.ndarray:
        w = 10.0 ** rng.uniform(np.log10(low), np.log10(high))
        return np.array([1.0 / w**2, 2.0 * rng.uniform(*damping) / w, 1.0])

    num, delay = np.array([1.0]), 0.0
    if family == "integrating":
        den = np.polymul(lag(0.05, 1.0), [1.0, 0.0])
    elif family == "chain":
        den = np.polymul(np.polymul(lag(0.03, 0.3), lag(0.1, 0.6)), lag(0.5, 2.0))
    elif family == "flex":
        den = np.polymul(np.polymul(lag(0.1, 1.0), [1.0, 0.0]), mode((0.005, 0.05), 3.0, 20.0))
    elif family == "lag1":
        den = np.polymul(lag(0.02, 0.2), lag(0.5, 2.0))
    elif family == "lag2":
        den = np.polymul(np.polymul(lag(0.01, 0.2), lag(0.2, 0.6)), lag(0.5, 2.0))
    elif family == "unstable":
        den = np.polymul(lag(0.05, 0.3), [1.0, -1.0])
        den = den * -1.0 if rng.random() < 0.5 else den
    elif family == "resonant":
        den = np.polymul(mode((0.02, 0.3), 0.5, 2.0), lag(0.05, 0.5))
    elif family == "zero":
        num = np.array([-(10.0 ** rng.uniform(-1.5, -0.3)), 1.0])
        den = np.polymul(lag(0.1, 0.6), lag(0.5, 2.0))
    elif family == "double":
        den = np.polymul(lag(0.02, 0.3), [1.0, 0.0, 0.0])
    else:
        den, delay = lag(0.3, 2.0), 10.0 ** rng.uniform(-1.3, 0.3)
    powers = unit ** np.arange(len(den) - 1, -1, -1)
    return Rational.of(gain * num * powers[-len(num) :], den * powers, delay * unit)


def witness(plants: Rational, rng: np.random.Generator) -> tuple[Structure, np.ndarray] | None:
    """A good compensator: robust, damped, placed by design coordinates; None when a few hundred draws find
    none."""
    marks = np.abs(np.concatenate([np.roots(plants.denominator[0]), np.roots(plants.numerator[0])]))
    marks = marks[marks > 0.0]
    for name in rng.permutation(list(REGISTRY)):
        structure = REGISTRY[str(name)]
        crossover = np.exp(rng.uniform(np.log(0.2 * marks.min()), np.log(5.0 * marks.max()), 80))
        loop = response(plants, crossover)[0]
        margin = np.radians(rng.uniform(35.0, 75.0, 80))
        sign = 1.0
        theta = structure.place(
            crossover, margin - np.pi - np.angle(loop), rng.random((80, structure.freedoms))
        )
        theta[:, 0] *= sign / np.abs(loop)
        theta = theta[np.isfinite(theta).all(axis=1)]
        if not len(theta):
            continue
        found = evaluate(plants, structure.realise(theta), measures=EVERY_QUANTITY)
        good = (
            found.stable[:, 0]
            & (found["sensitivity_peak"][:, 0] < 2.2)
            & (found["damping_ratio"][:, 0] > 0.2)
        )
        good &= found["overshoot"][:, 0] < 40.0
        if good.any():
            return structure, theta[np.flatnonzero(good)[0]]
    return None


def sheet(values: dict[str, float], loosen: float, rng: np.random.Generator) -> tuple[Bound, ...]:
    """Bounds on the always-asked quantities and on some of the others, each loosened by that share."""
    parts: list[tuple[Measure, str, float, None]] = []
    for key in (*ALWAYS, *[k for k in SOMETIMES if rng.random() < 0.4]):
        value = values[key]
        if not np.isfinite(value):
            continue
        row = Measure(key).row
        spare = loosen * max(abs(value), row.scale or 0.0)
        if key == "bandwidth":
            parts += [(Measure(key), "min", value - spare, None), (Measure(key), "max", value + spare, None)]
        elif row.better == "max":
            parts.append((Measure(key), "min", min(value, row.best or np.inf) - spare, None))
        else:
            parts.append((Measure(key), "max", value + spare, None))
    return numbered(parts)  # type: ignore[arg-type]


def problem(seed: int, family: str, loosen: float, *, push: bool = False) -> Problem | None:
    """One problem; None when the family gave no witness for this seed."""
    rng = np.random.default_rng([seed, FAMILIES.index(family)])
    plants = plant(family, rng)
    found = witness(plants, rng)
    if found is None:
        return None
    structure, theta = found
    if push:
        theta = pushed(
            plants,
            structure,
            theta,
            sheet(figures(plants, structure, theta), 0.1, np.random.default_rng(seed)),
        )
    bounds = sheet(figures(plants, structure, theta), loosen, np.random.default_rng(seed))
    task = Task(plants, ("nominal",), bounds, tuple(REGISTRY.values()))
    return Problem(f"{family}-{seed}", task, structure.name, theta)


def figures(plants: Rational, structure: Structure, theta: np.ndarray) -> dict[str, float]:
    """Every quantity of one compensator."""
    found = evaluate(plants, structure.realise(theta[None, :]))
    return {m.quantity: float(v) for m, v in zip(found.measures, found.values[0, 0], strict=True)}


def pushed(
    plants: Rational, structure: Structure, theta: np.ndarray, bounds: tuple[Bound, ...]
) -> np.ndarray:
    """The witness moved to a local optimum of its sheet's worst slack."""
    measures = tuple(dict.fromkeys(b.measure for b in bounds))

    def cost(x: np.ndarray) -> float:
        moved = theta * np.exp(x)
        if not structure.legal(moved[None, :])[0]:
            return 50.0
        found = evaluate(plants, structure.realise(moved[None, :]), measures=measures)
        if not found.stable[0, 0]:
            return 50.0
        return -min(float(slack_of(b, found[b.measure][0, 0])) for b in bounds)

    best = minimize(
        cost, np.zeros(len(theta)), method="Nelder-Mead", options={"maxfev": 250, "initial_simplex": None}
    )
    return theta * np.exp(best.x) if best.fun < cost(np.zeros(len(theta))) else theta


def problems(
    count: int, loosen: float, *, push: bool = False, seed: int = 7000, families: tuple[str, ...] = FAMILIES
) -> list[Problem]:
    """`count` problems, the families in turn."""
    out: list[Problem] = []
    n = 0
    while len(out) < count:
        one = problem(seed + n, families[n % len(families)], loosen, push=push)
        n += 1
        if one is not None:
            out.append(one)
    return out
