"""The sheet: every table and key of a spec file, written down once.

The reader checks files against these tables and the JSON Schema is made from them. What a key means beyond
its value (names that must exist, bounds that contradict) is in plant.py, parameters.py,
requirements.py.
"""

from __future__ import annotations

from synth.loop.quantities import QUANTITIES, Quantity
from synth.spec.kinds import (
    NUMBER,
    TEXT,
    Choice,
    DeadTime,
    Direct,
    Expression,
    Field,
    Kind,
    Many,
    Measured,
    Root,
    Schema,
    Span,
    Table,
    Text,
    Vector,
    Whole,
)
from synth.spec.source import Node
from synth.spec.units import UnitFault, sample
from synth.spec.units import parameter as parameter_value
from synth.structures import REGISTRY

LATER = ("format", "implementation", "actuator", "prefilter", "inner")
BUDGETS = ("quick", "normal", "thorough")


class ParameterNumber(Kind):
    """A number in SI, or a number with a unit."""

    def read(self, node: Node) -> float | None:
        """See Kind."""
        try:
            return parameter_value(node.value)
        except UnitFault as fault:
            node.fault(fault.what, fault.allowed, fault.nearest)
            return None

    def schema(self) -> Schema:
        """See Kind."""
        return {"anyOf": [dict(NUMBER), dict(TEXT)]}


def _tolerance(value: float) -> str | None:
    return None if 0.0 <= value < 100.0 else "a tolerance must be at least 0 % and below 100 %"


def _share(value: float) -> str | None:
    return None if 0.0 <= value < 100.0 else "a reserve must be at least 0 % and below 100 %"


def _band(value: float) -> str | None:
    return None if 0.0 < value < 100.0 else "a band must lie above 0 % and below 100 %"


def _positive(value: float) -> str | None:
    return None if value > 0.0 else "this must be above 0"


def _nonzero(value: float) -> str | None:
    return "a step of 0 is no step" if value == 0.0 else None


PARAMETER = Table(
    {
        "value": Field(ParameterNumber(), "nominal value", required=True),
        "tolerance": Field(Measured("percent", _tolerance), 'symmetric tolerance, such as "20 %"'),
        "range": Field(
            Many(ParameterNumber(), 'the lower and the upper value, such as ["1 ms", "4 ms"]'),
            "lower and upper value",
        ),
    },
    later=("design",),
    rest_name="key of a parameter",
)


class ParameterKind(Kind):
    """A number, or a table with a tolerance or a range. Reads (nominal, low, high)."""

    def read(self, node: Node) -> tuple[float, float, float] | None:
        """See Kind."""
        if not isinstance(node.value, dict):
            value = ParameterNumber().read(node)
            return None if value is None else (value, value, value)
        read = PARAMETER.read(node) or {}
        if "value" not in read or len(read) < len(node.value):
            return None
        value = read["value"]
        if "tolerance" in read and "range" in read:
            node.fault("a parameter takes a tolerance or a range, not both", "tolerance or range")
            return None
        if "tolerance" in read:
            if value == 0.0:
                node.child("tolerance").fault("a tolerance in % of a value of 0 is nothing", "give a range")
                return None
            reach = abs(value) * read["tolerance"] / 100.0
            return value, value - reach, value + reach
        if "range" in read:
            return self._between(node.child("range"), value, [v for _, v in read["range"]])
        return value, value, value

    @staticmethod
    def _between(node: Node, value: float, ends: list[float]) -> tuple[float, float, float] | None:
        words = "the lower and the upper value, with the nominal value between them"
        if len(ends) != 2:
            node.fault("a range has two values", words)
        elif ends[0] > ends[1]:
            node.fault("the lower end of the range stands above the upper", words)
        elif not ends[0] <= value <= ends[1]:
            node.fault("the nominal value lies outside its range", words)
        else:
            return value, ends[0], ends[1]
        return None

    def schema(self) -> Schema:
        """See Kind."""
        return {"anyOf": [dict(NUMBER), dict(TEXT), PARAMETER.schema()]}


SIGNAL = Table(
    {"name": Field(Text(), "what it is, for reports"), "unit": Field(Text(), "its unit, for reports")},
    rest_name="key of a signal",
    example='a table such as { name = "torque command", unit = "V" }',
)

_ENTRIES = Many(Expression(), "numbers, or formulas of the parameters in quotes, in [ ]")
_ROOTS = Many(Root(), 'roots in [ ], such as [-3.0, "-2+5j", "-2-5j"]')

PLANT = Table(
    {
        "transfer": Field(Expression(in_s=True), 'a formula in s, such as "K * exp(-theta*s) / (T*s + 1)"'),
        "numerator": Field(_ENTRIES, "coefficients in descending powers of s"),
        "denominator": Field(_ENTRIES, "coefficients in descending powers of s"),
        "gain": Field(Expression(), "k of k·Π(s - zero)/Π(s - pole)"),
        "zeros": Field(_ROOTS, "zeros; complex ones with their conjugates"),
        "poles": Field(_ROOTS, "poles; complex ones with their conjugates"),
        "A": Field(Many(_ENTRIES, "rows in [ ], such as [[0, 1], [-4, -2]]"), "state matrix, n rows of n"),
        "B": Field(Vector(), "input column, n entries"),
        "C": Field(Vector(), "output row, n entries"),
        "D": Field(Direct(), "direct path, one number"),
        "dead_time": Field(DeadTime(), "dead time of a list form, with its unit or a formula"),
        "valid_to": Field(Measured("frequency", _positive), "how far the model was identified"),
        "input": Field(SIGNAL, "name and unit of u, for reports"),
        "output": Field(SIGNAL, "name and unit of y, for reports"),
    },
    rest_name="key of a plant",
    hints={
        "tf": "transfer",
        "num": "numerator",
        "den": "denominator",
        "delay": "dead_time",
        "formula": "transfer",
    },
)
# the forms a plant may take: all of the keys, and those that may be left out
FORMS: dict[str, tuple[tuple[str, ...], tuple[str, ...]]] = {
    "formula": (("transfer",), ()),
    "coefficients": (("numerator", "denominator"), ("dead_time",)),
    "roots": (("gain", "poles"), ("zeros", "dead_time")),
    "matrices": (("A", "B", "C"), ("D", "dead_time")),
}

CASE = Table(
    {"name": Field(Text(), "the name of the case", required=True)},
    rest=ParameterNumber(),
    example="[[cases]] with a name and values of parameters",
)


def _limit(quantity: Quantity) -> Measured:
    """A limit of a quantity: what cannot be meant is refused here."""

    def rule(value: float) -> str | None:
        if value == 0.0 and quantity.scale is None:
            return f"a limit of 0 on the {quantity.name} cannot be meant"
        if value < 0.0 and quantity.key != "final_value":
            return f"the {quantity.name} is never below 0"
        return None

    return Measured(quantity.dimension, rule)


_OPTIONS: dict[str, Field] = {
    "band": Field(
        Measured("percent", _band), "half width of the band round the final value, 2 % unless given"
    ),
    "below": Field(Measured("frequency", _positive), "count exactly the poles up to this magnitude"),
    "span": Field(Span(), '"10-90 %" unless given'),
}


def bound_table(quantity: Quantity) -> Table:
    """What a bound on one quantity may say."""
    unit = quantity.unit or "a pure ratio"
    side = "min" if quantity.better == "max" else "max"
    example = sample(quantity.dimension)
    return Table(
        {
            "min": Field(_limit(quantity), f"at least this ({unit})"),
            "max": Field(_limit(quantity), f"at most this ({unit})"),
            **{name: _OPTIONS[name] for name in quantity.options},
            "cases": Field(
                Many(Text(), 'names of plant cases, such as ["nominal"]'), "judged on these cases only"
            ),
        },
        rest_name="key of a bound",
        hints={"maximum": "max", "minimum": "min", "upper": "max", "lower": "min", "case": "cases"},
        example=f"a bound such as {{ {side} = {example} }}",
        wrap=f"{{ {side} = ? }}",
    )


LISTED = {key: row for key, row in QUANTITIES.items() if row.listed}

REQUIREMENTS = Table(
    {
        key: Field(
            Many(bound_table(row), "a bound, or a list of bounds", single=True),
            f"{row.name} [{row.unit or '-'}]",
        )
        for key, row in LISTED.items()
    },
    rest_name="quantity",
    hints={"Ms": "sensitivity_peak", "Mt": "complementary_peak", "pm": "phase_margin", "gm": "gain_margin"},
)

PREFER = Table(
    {
        "minimise": Field(Choice(tuple(LISTED), "quantity"), "the quantity to make small"),
        "maximise": Field(Choice(tuple(LISTED), "quantity"), "the quantity to make large"),
        "reserve": Field(Measured("percent", _share), 'worst slack that must be left, such as "5 %"'),
    },
    rest_name="key of [prefer]",
    hints={"minimize": "minimise", "maximize": "maximise"},
)

SEARCH = Table(
    {
        "structures": Field(
            Many(Choice(tuple(REGISTRY), "structure"), 'names in [ ], such as ["PI", "PID"]'),
            "every structure that fits unless given",
        ),
        "budget": Field(Choice(BUDGETS, "budget"), '"normal" unless given'),
        "seed": Field(Whole(0, 2**32 - 1), "0 unless given"),
    },
    rest_name="key of [search]",
)

REFERENCE = Table(
    {
        "step": Field(
            Measured("plant", _nonzero), "size of the reference step that control_peak is judged for"
        )
    },
    rest_name="key of [reference]",
)

SHEET = Table(
    {
        "title": Field(Text(), "what the sheet is about"),
        "revision": Field(Text(), 'of the plant model, any text, such as "B"'),
        "plant": Field(PLANT, "the plant in exactly one form", required=True),
        "parameters": Field(
            Table(
                {},
                rest=ParameterKind(),
                rest_name="parameter",
                example="[parameters] with name = value lines",
            ),
            "names used in the plant, with their values",
        ),
        "cases": Field(Many(CASE, "[[cases]], one for each operating case"), "operating cases"),
        "reference": Field(REFERENCE, "the reference step"),
        "requirements": Field(REQUIREMENTS, "at least one bound on a quantity", required=True),
        "prefer": Field(PREFER, "what to improve among those that meet everything"),
        "search": Field(SEARCH, "how to search"),
    },
    later=LATER,
    rest_name="key",
)
