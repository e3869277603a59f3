"""The trade's words and units for what is named by key: quantities, requirements, tuned values."""

from __future__ import annotations

from synth.loop.quantities import QUANTITIES, Measure
from synth.wording.figures import quantity

NO_UNIT = ("-", "1")  # how sheets write that u or y has none
WORD = {"min": "at least", "max": "at most"}


def quantity_name(key: str) -> str:
    """The name of a quantity; a key that this version does not know reads as it stands."""
    row = QUANTITIES.get(key)
    return row.name if row is not None else key.replace("_", " ")


def plant_unit(unit: str, u: str = "", y: str = "") -> str:
    """The plant's own units filled in: "u per y" is "V per rad". Those a sheet does not give stay u, y and d.

    u, y : unit of the plant's input and output; a disturbance d enters at the input.
    """
    own = {"u": u or "u", "d": u or "d", "y": y or "y"}
    sides = [
        " ".join(own.get(part, part) for part in side.split() if own.get(part) not in NO_UNIT)
        for side in unit.split(" per ")
    ]
    if len(sides) == 2 and sides[1]:
        return f"{sides[0]} per {sides[1]}".strip()
    return sides[0]


def quantity_unit(key: str, u: str = "", y: str = "") -> str:
    """Unit of a quantity; "" for a pure ratio and for a key that this version does not know."""
    row = QUANTITIES.get(key)
    return plant_unit(row.unit, u, y) if row is not None else ""


def measure_name(
    key: str,
    *,
    band: float | None = None,
    below: float | None = None,
    span: tuple[float, float] | None = None,
) -> str:
    """A quantity with the options that are worth a word: "settling time (5 %)"."""
    name = quantity_name(key)
    if band is not None:
        return f"{name} ({100.0 * band:g} %)"
    if below is not None:
        return f"{name} below {below:.4g} rad/s"
    if span is not None:
        return f"{name} ({100.0 * span[0]:g}-{100.0 * span[1]:g} %)"
    return name


def options_of(measure: Measure) -> dict[str, float | tuple[float, float]]:
    """The options of a measure that differ from the usual, as `measure_name` and the record take them."""
    usual = Measure(measure.quantity)
    out: dict[str, float | tuple[float, float]] = {}
    if measure.quantity == "settling_time":
        out["band"] = measure.band
    if measure.below is not None:
        out["below"] = measure.below
    if measure.span != usual.span:
        out["span"] = measure.span
    return out


def name_of(measure: Measure) -> str:
    """`measure_name` of a measure; the usual 2 % band of a settling time is not said."""
    options = options_of(measure)
    if options.get("band") == Measure(measure.quantity).band:
        del options["band"]
    return measure_name(measure.quantity, **options)  # type: ignore[arg-type]


def parameter_name(key: str) -> str:
    """A tuned value's key in words."""
    return key.replace("_", " ")


def limit_words(side: str, limit: float, unit: str) -> str:
    """ "at most 10 %"."""
    return f"{WORD[side]} {quantity(limit, unit)}"
