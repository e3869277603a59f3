"""What a sheet says once it is read: values in the program's units, nothing left to look up."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

from synth.loop.quantities import Measure, Side
from synth.model.cases import ParameterRange, PlantCases
from synth.model.forms import PlantForm
from synth.requirements import Bound


@dataclass(frozen=True, slots=True)
class Signal:
    """Name and unit of u or y, for reports; empty where the sheet does not say."""

    name: str = ""
    unit: str = ""


@dataclass(frozen=True, slots=True)
class Preference:
    """What to improve among those that meet everything, and the slack to keep (0.05 is 5 %)."""

    quantity: Measure
    sense: Side
    reserve: float = 0.0


@dataclass(frozen=True, slots=True)
class SearchSettings:
    """structures: None for every one that fits."""

    structures: tuple[str, ...] | None = None
    budget: Literal["quick", "normal", "thorough"] = "normal"
    seed: int = 0


@dataclass(frozen=True, slots=True)
class Spec:
    """A sheet.

    file            as the user named it
    text, sha256    the file verbatim, and its hash
    form            the plant as written; `ranges` its parameters in SI
    operating       operating cases: (name, overridden parameters)
    cases           every plant the sheet is judged on, the nominal first
    valid_to        [rad/s], None where the sheet does not say
    reference_step  size of the step that control_peak is judged for, in the unit of y
    """

    file: str
    text: str
    sha256: str
    title: str
    revision: str
    form: PlantForm
    ranges: tuple[ParameterRange, ...]
    operating: tuple[tuple[str, Mapping[str, float]], ...]
    cases: PlantCases
    valid_to: float | None
    input: Signal
    output: Signal
    reference_step: float
    bounds: tuple[Bound, ...]
    prefer: Preference | None
    search: SearchSettings
