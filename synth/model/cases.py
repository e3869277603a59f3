"""The plant cases: nominal, corners of the tolerance box, operating cases; and points inside the box.

Letters: K cases, m parameters with a tolerance or range.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from synth.loop.arrays import FloatArray
from synth.loop.closed_loop import Rational
from synth.model.forms import PlantForm
from synth.model.plant import Plant

Kind = Literal["nominal", "corner", "operating", "interior"]

MOST_CORNERS = 64
SAMPLE = 64  # points of the box that stand for its corners where there are more than MOST_CORNERS


@dataclass(frozen=True, slots=True)
class ParameterRange:
    """A parameter in SI: nominal value and ends of its tolerance; low = high = nominal without one."""

    name: str
    nominal: float
    low: float
    high: float

    @property
    def varies(self) -> bool:
        """Whether it has a tolerance or a range."""
        return self.low != self.high


@dataclass(frozen=True, slots=True)
class CasePoint:
    """A case before its plant is formed: name, kind, and a value for every parameter."""

    name: str
    kind: Kind
    parameters: dict[str, float]


@dataclass(frozen=True, slots=True)
class PlantCase:
    """One plant the sheet is judged on."""

    name: str
    kind: Kind
    parameters: dict[str, float]
    plant: Plant


@dataclass(frozen=True, slots=True)
class PlantCases:
    """K cases and their plants stacked; the first is the nominal one.

    form, ranges : what the cases were made from, for points inside the box
    """

    cases: tuple[PlantCase, ...]
    rational: Rational
    form: PlantForm
    ranges: tuple[ParameterRange, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the K cases."""
        return tuple(c.name for c in self.cases)

    def __len__(self) -> int:
        return len(self.cases)

    @classmethod
    def build(
        cls,
        form: PlantForm,
        ranges: Sequence[ParameterRange] = (),
        operating: Sequence[tuple[str, Mapping[str, float]]] = (),
    ) -> PlantCases:
        """Nominal, corners and operating cases of a form. Raises FormulaError, FormError with `.case`, an
        index into `case_points(ranges, operating)`."""
        return cls._of(form, tuple(ranges), case_points(ranges, operating))

    @classmethod
    def of_plant(cls, plant: Plant) -> PlantCases:
        """One plant alone, as the nominal case."""
        from synth.model.forms import from_coefficients

        form = from_coefficients(plant.numerator, plant.denominator, plant.dead_time)
        return cls.build(form)

    @classmethod
    def _of(
        cls, form: PlantForm, ranges: tuple[ParameterRange, ...], points: Sequence[CasePoint]
    ) -> PlantCases:
        columns = {r.name: np.array([p.parameters[r.name] for p in points]) for r in ranges}
        rational = form.plants(columns, len(points))
        cases = tuple(
            PlantCase(p.name, p.kind, p.parameters, Plant.from_row(rational, k)) for k, p in enumerate(points)
        )
        return cls(cases, rational, form, ranges)

    def interior(self, count: int = 256, seed: int = 0) -> PlantCases:
        """`count` points inside the tolerance box, the same for a seed; no cases where nothing varies.

        Kronecker's sequence on the generalised golden ratio, evenly spread in any dimension and cut anywhere.
        """
        varying = [r for r in self.ranges if r.varies]
        if not varying or count == 0:
            empty = np.zeros(0, dtype=np.intp)
            return replace(self, cases=(), rational=self.rational.rows(empty))
        return self._of(self.form, self.ranges, _inside(self.ranges, count, seed, "inside", "interior"))


def case_points(
    ranges: Sequence[ParameterRange], operating: Sequence[tuple[str, Mapping[str, float]]] = ()
) -> tuple[CasePoint, ...]:
    """The cases of the corner rule, in order: nominal, corners, operating cases.

    Up to 64 corners: all of them ("I high, theta low"). Beyond that: each parameter alone at its ends
    ("I high") and a fixed sample of the box ("sample 1" ...). An operating case overrides the nominal values.
    """
    nominal = {r.name: r.nominal for r in ranges}
    varying = [r for r in ranges if r.varies]
    points = [CasePoint("nominal", "nominal", nominal)]
    if varying and 2 ** len(varying) <= MOST_CORNERS:
        for ends in itertools.product(("low", "high"), repeat=len(varying)):
            points.append(_corner(nominal, list(zip(varying, ends, strict=True))))
    elif varying:
        for r in varying:
            points += [_corner(nominal, [(r, end)]) for end in ("low", "high")]
        points += _inside(ranges, SAMPLE, 0, "sample", "corner")
    for name, values in operating:
        points.append(CasePoint(name, "operating", {**nominal, **values}))
    return tuple(points)


def _corner(nominal: dict[str, float], ends: list[tuple[ParameterRange, str]]) -> CasePoint:
    values = {r.name: r.low if end == "low" else r.high for r, end in ends}
    name = ", ".join(f"{r.name} {end}" for r, end in ends)
    return CasePoint(name, "corner", {**nominal, **values})


def _inside(
    ranges: Sequence[ParameterRange], count: int, seed: int, word: str, kind: Kind
) -> list[CasePoint]:
    varying = [r for r in ranges if r.varies]
    share = spread(count, len(varying), seed)
    low, high = np.array([r.low for r in varying]), np.array([r.high for r in varying])
    values = low + share * (high - low)
    nominal = {r.name: r.nominal for r in ranges}
    names = [r.name for r in varying]
    return [
        CasePoint(f"{word} {i + 1}", kind, {**nominal, **dict(zip(names, map(float, row), strict=True))})
        for i, row in enumerate(values)
    ]


def spread(count: int, dimensions: int, seed: int = 0) -> FloatArray:
    """`count` points evenly spread in the unit cube, (count, dimensions).

    x_i = frac(shift + i·a), a_j = g^-j with g the root of g^(dimensions + 1) = g + 1 (1.618... in one
    dimension):
    H. Weyl, Über die Gleichverteilung von Zahlen mod. Eins, 1916; g by M. Roberts, 2018. The shift is drawn
    from the seed.
    """
    g = 2.0
    for _ in range(64):
        g = (1.0 + g) ** (1.0 / (dimensions + 1))
    shift = np.random.default_rng(seed).uniform(size=dimensions)
    steps = g ** -np.arange(1.0, dimensions + 1.0)
    out: FloatArray = (shift + np.arange(1, count + 1)[:, None] * steps) % 1.0
    return out
