"""How numbers read: four significant digits, times in the unit that suits them, infinities in words."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

MINUS = "\N{MINUS SIGN}"
INFINITE = "\N{INFINITY}"
ABSENT = "\N{EM DASH}"

_TIME_UNITS = ((1e-6, 1e-9, "ns"), (1e-3, 1e-6, "µs"), (0.1, 1e-3, "ms"), (1e4, 1.0, "s"), (4e5, 3600.0, "h"))


@dataclass(frozen=True, slots=True)
class Unit:
    """A unit to print in: `value / factor` is shown, followed by `word`."""

    factor: float = 1.0
    word: str = ""

    def number(self, value: float, digits: int = 4) -> str:
        """The number alone."""
        return figure(value / self.factor, digits)

    def full(self, value: float, digits: int = 4) -> str:
        """The number with its unit; what is absent or infinite stands without."""
        text = self.number(value, digits)
        return f"{text} {self.word}" if self.word and math.isfinite(value) else text


def unit_for(unit: str, values: Iterable[float]) -> Unit:
    """The unit in which values of one kind read best together: times in ns to days, by the largest."""
    if unit != "s":
        return Unit(1.0, unit)
    sizes = [abs(v) for v in values if math.isfinite(v) and v != 0.0]
    largest = max(sizes, default=1.0)
    for below, factor, word in _TIME_UNITS:
        if largest < below:
            return Unit(factor, word)
    return Unit(86400.0, "d")


def quantity(value: float, unit: str, digits: int = 4) -> str:
    """One value with its unit: 0.0023 s reads "2.3 ms"."""
    return unit_for(unit, [value]).full(value, digits)


def figure(value: float, digits: int = 4) -> str:
    """So many significant digits, no exponent where one can do without, a true minus sign."""
    if math.isnan(value):
        return ABSENT
    if math.isinf(value):
        return INFINITE if value > 0.0 else MINUS + INFINITE
    if value == 0.0:
        return "0"
    rounded = float(f"{value:.{digits - 1}e}")
    exponent = math.floor(math.log10(abs(rounded)))
    if -4 <= exponent < 6:
        text = f"{rounded:.{max(0, digits - 1 - exponent)}f}"
        text = text.rstrip("0").rstrip(".") if "." in text else text
    else:
        mantissa = f"{rounded / 10.0**exponent:.{digits - 1}f}".rstrip("0").rstrip(".")
        text = f"{mantissa}e{exponent}"
    return text.replace("-", MINUS)


def exact(value: float) -> str:
    """All the digits of a tuned value: what was scored, ready to be typed in (an ASCII minus)."""
    text = repr(float(value))
    return text.removesuffix(".0")


def percent(value: float) -> str:
    """A slack: signed, in % of the limit."""
    if math.isnan(value):
        return ABSENT
    if math.isinf(value):
        return INFINITE if value > 0.0 else MINUS + INFINITE
    scaled = 100.0 * value
    size = abs(scaled)
    text = f"{size:.0f}" if size >= 99.5 else f"{size:.1f}" if size >= 0.095 else f"{size:.2g}"
    if size > 1e5:
        text = figure(size, 2)
    sign = "+" if scaled > 0.0 else MINUS if scaled < 0.0 else ""
    return f"{sign}{text} %"


def change(old: float, new: float) -> str:
    """From one value to another: "+9.5 %", or "×60" beyond a factor of five; "" where the old one is 0."""
    if old == 0.0:
        return ""
    ratio = new / old
    if ratio >= 5.0:
        return f"×{figure(ratio, 2)}"
    if 0.0 < ratio <= 0.2:
        return f"÷{figure(1.0 / ratio, 2)}"
    return percent(ratio - 1.0)


def pole(re: float, im: float) -> str:
    """A pole; a pair is given by its upper half."""
    if im == 0.0:
        return figure(re)
    return f"{figure(re)} ± {figure(abs(im))}j"


def count(n: int, one: str, many: str | None = None) -> str:
    """ "1 case", "9 cases"."""
    return f"{n:,} {one if n == 1 else many or one + 's'}"
