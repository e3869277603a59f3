"""A record's keys in the trade's words, with the units the sheet gave."""

from __future__ import annotations

from synth.loop.quantities import QUANTITIES
from synth.record.format import Requirement, SpecPart
from synth.wording import names as words


def quantity_unit(key: str, spec: SpecPart | None = None) -> str:
    """Unit of a quantity, with the plant's own units filled in where the sheet names them."""
    row = QUANTITIES.get(key)
    return plant_unit(row.unit, spec) if row is not None else ""


def plant_unit(unit: str, spec: SpecPart | None) -> str:
    """ "u per y" with the sheet's units: "V per rad"."""
    if spec is None:
        return unit
    u, y = spec.get("input"), spec.get("output")
    return words.plant_unit(unit, u["unit"] if u else "", y["unit"] if y else "")


def requirement_name(requirement: Requirement) -> str:
    """The quantity with the options this requirement put on it; the usual 2 % band is not said."""
    band = requirement.get("band")
    span = requirement.get("span")
    return words.measure_name(
        requirement["quantity"],
        band=None if band == 0.02 else band,
        below=requirement.get("below"),
        span=(span[0], span[1]) if span else None,
    )
