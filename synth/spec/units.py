"""Numbers with units, as a sheet writes them, to the unit the program counts in.

Hz is cycles per second and never rad/s. A limit takes the units of its own dimension; a parameter takes those
and the units of the workshop with their prefixes ("47 uF"), and becomes SI.
"""

from __future__ import annotations

import math
import re
from types import MappingProxyType

from synth.errors import nearest
from synth.loop.quantities import Dimension

_TIME = {"us": 1e-6, "ms": 1e-3, "s": 1.0, "min": 60.0, "h": 3600.0}
_RADIAN = {"rad/s": 1.0, "1/s": 1.0}
_CYCLE = {"Hz": 2.0 * math.pi, "kHz": 2e3 * math.pi}

# dimension -> unit as written -> what it is worth in the unit of the table of quantities
UNITS: MappingProxyType[Dimension, dict[str, float]] = MappingProxyType(
    {
        "time": _TIME,
        "frequency": {**_RADIAN, **_CYCLE},
        "rate": {"1/s": 1.0},
        "angle": {"deg": 1.0},
        "decibel": {"dB": 1.0},
        "percent": {"%": 1.0},
        "ratio": {},
        "plant": {},
    }
)
_EXAMPLES: dict[Dimension, str] = {
    "time": '"1.2 s"',
    "frequency": '"2 Hz" or "12.6 rad/s"',
    "rate": '"3 1/s"',
    "angle": '"45 deg"',
    "decibel": '"6 dB"',
    "percent": '"10 %"',
    "ratio": "0.7",
    "plant": "2.5",
}
_WORDS: dict[Dimension, str] = {
    "time": "a time",
    "frequency": "a frequency",
    "rate": "a rate",
    "angle": "an angle",
    "decibel": "a figure in dB",
    "percent": "a percentage",
    "ratio": "a bare number",
    "plant": "a bare number in the plant's own units (SI)",
}
# what people write for a unit that is spelt otherwise here
_SPELT = {
    "sec": "s", "secs": "s", "second": "s", "seconds": "s", "S": "s", "msec": "ms", "µs": "us", "μs": "us",
    "usec": "us", "mins": "min", "minute": "min", "minutes": "min", "hr": "h", "hour": "h", "hours": "h",
    "rad/sec": "rad/s", "rads": "rad/s", "rad": "rad/s", "r/s": "rad/s", "rad s^-1": "rad/s",
    "s^-1": "1/s", "/s": "1/s",
    "hz": "Hz", "HZ": "Hz", "khz": "kHz", "KHz": "kHz", "cps": "Hz",
    "degree": "deg", "degrees": "deg", "°": "deg", "db": "dB", "DB": "dB", "percent": "%", "pct": "%",
}  # fmt: skip

# A parameter becomes SI: degrees are radians then, a percentage a ratio, and dB an amplitude ratio.
_PREFIXES = {"p": 1e-12, "n": 1e-9, "u": 1e-6, "µ": 1e-6, "μ": 1e-6, "m": 1e-3, "k": 1e3, "M": 1e6, "G": 1e9}
_WORKSHOP = ("V", "A", "W", "H", "F", "Ohm", "Ω", "N", "Nm", "J", "Pa", "m", "K", "rad")
PARAMETER_UNITS: MappingProxyType[str, float] = MappingProxyType(
    {
        **{prefix + unit: worth for unit in _WORKSHOP for prefix, worth in _PREFIXES.items()},
        **dict.fromkeys(_WORKSHOP, 1.0),
        "kg": 1.0,
        "g": 1e-3,
        "mm": 1e-3,
        "cm": 1e-2,
        "l": 1e-3,
        "bar": 1e5,
        "degC": 1.0,
        **_TIME,
        **_RADIAN,
        **_CYCLE,
        "MHz": 2e6 * math.pi,
        "rpm": 2.0 * math.pi / 60.0,
        "deg": math.pi / 180.0,
        "%": 0.01,
    }
)

_NUMBER = r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_WRITTEN = re.compile(rf"\s*({_NUMBER})\s*(.*?)\s*", re.DOTALL)
_SPAN = re.compile(rf"\s*({_NUMBER})\s*%?\s*(?:-|–|to)\s*({_NUMBER})\s*%\s*")


class UnitFault(Exception):
    """What is wrong with a number and its unit, what may stand there, and the nearest right text."""

    def __init__(self, what: str, allowed: str, nearest: str | None = None) -> None:
        super().__init__(what)
        self.what = what
        self.allowed = allowed
        self.nearest = nearest


def allowed(dimension: Dimension) -> str:
    """What a sheet may write, in words: 'a time with its unit (us ms s min h), such as "1.2 s"'."""
    units = UNITS[dimension]
    if not units:
        return f"{_WORDS[dimension]}, such as {_EXAMPLES[dimension]}"
    return f"{_WORDS[dimension]} with its unit ({' '.join(units)}), such as {_EXAMPLES[dimension]}"


def sample(dimension: Dimension) -> str:
    """A value as a sheet may write it."""
    return _EXAMPLES[dimension].split(" or ")[0]


def measured(value: object, dimension: Dimension) -> float:
    """A TOML value as a number in the unit of the table of quantities. Raises UnitFault."""
    units = UNITS[dimension]
    words = allowed(dimension)
    if isinstance(value, bool) or not isinstance(value, (int, float, str)):
        raise UnitFault(
            "this must be " + ("a number with its unit, in quotes" if units else "a number"), words
        )
    if not isinstance(value, str):
        finite(value, words)
        if units:
            only = next(iter(units)) if len(units) == 1 else None
            near = f'"{_short(value)} {only}"' if only else None
            raise UnitFault(f"{_WORDS[dimension]} must carry its unit", words, near)
        return finite(value, words)
    number, unit = _taken_apart(value, words)
    if not units:
        if unit:
            bare = {"dB": 10.0 ** (min(number, 200.0) / 20.0), "%": number / 100.0}.get(unit)
            near = f"{bare:.6g}" if bare is not None else None
            raise UnitFault(f"{_WORDS[dimension]} must stand here, without a unit", words, near)
        raise UnitFault("a bare number must not stand in quotes", words, _short(number))
    if not unit:
        raise UnitFault(f"{_WORDS[dimension]} must carry its unit", words)
    if unit not in units:
        right = _SPELT.get(unit)
        if right not in units:
            right = None if unit in PARAMETER_UNITS else nearest(unit, units)
        near = f'"{_short(number)} {right}"' if right else None
        raise UnitFault(f"`{unit}` is no unit of {_WORDS[dimension].split(' ', 1)[1]}", words, near)
    return finite(number * units[unit], words)


def parameter(value: object) -> float:
    """A parameter: a bare number, or a number with a unit, converted to SI. Raises UnitFault."""
    words = 'a number in SI, or a number with its unit such as "2 ms", "47 uF" or "30 Hz"'
    if isinstance(value, bool) or not isinstance(value, (int, float, str)):
        raise UnitFault("a parameter must be a number", words)
    if not isinstance(value, str):
        return finite(value, words)
    number, unit = _taken_apart(value, words)
    if not unit:
        raise UnitFault("a bare number must not stand in quotes", words, _short(number))
    if unit == "dB":
        return finite(10.0 ** min(number / 20.0, 400.0) if number < 8000.0 else math.inf, words)
    if unit not in PARAMETER_UNITS:
        right = _SPELT.get(unit) or nearest(unit, PARAMETER_UNITS)
        near = f'"{_short(number)} {right}"' if right else None
        raise UnitFault(f"`{unit}` is no unit that is known here", f"{words}; convert others to SI", near)
    return finite(number * PARAMETER_UNITS[unit], words)


def span(value: object) -> tuple[float, float]:
    """Start and end level of a rise, "10-90 %", as fractions. Raises UnitFault."""
    words = 'two percentages, the lower first, such as "10-90 %" or "0-100 %"'
    match = _SPAN.fullmatch(value) if isinstance(value, str) else None
    if match is None:
        raise UnitFault("this is no span", words)
    low, high = float(match.group(1)) / 100.0, float(match.group(2)) / 100.0
    if not 0.0 <= low < high <= 1.0:
        raise UnitFault("a span must go from a lower to a higher level between 0 and 100 %", words)
    return low, high


def finite(number: float, words: str) -> float:
    """The number as a float; refused when it is not finite. Raises UnitFault."""
    try:
        out = float(number)
    except OverflowError:
        out = math.inf
    if math.isnan(out):
        raise UnitFault("`nan` is no number that can be meant", words)
    if math.isinf(out):
        raise UnitFault("the number is not finite", words)
    return out


def _taken_apart(text: str, words: str) -> tuple[float, str]:
    if re.match(r"\s*[+-]?\d+,\d", text):
        near = '"' + text.strip().replace(",", ".", 1) + '"'
        raise UnitFault("decimals are written with a point", words, near)
    match = _WRITTEN.fullmatch(text)
    if match is None:
        raise UnitFault("this does not begin with a finite number", words)
    return float(match.group(1)), match.group(2)


def _short(number: float) -> str:
    return f"{number:.12g}"
