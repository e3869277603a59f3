"""A compensator as it is written: tuned values in a line, C(s) in factors, the forms that are typed in."""

from __future__ import annotations

from rich.text import Text

from synth.record import Candidate, Closest, Compensator, Pole, SpecPart, parameter_name, plant_unit
from synth.report.theme import Columns, hanging, items
from synth.wording.figures import MINUS, exact, figure, pole, quantity


def tuned(candidate: Candidate | Closest) -> list[str]:
    """The tuned values with all the digits that were scored: "gain 3.1", "integral time 0.8 s"."""
    return tuned_values(candidate["parameters"], candidate.get("units", {}))


def tuned_values(parameters: dict[str, float], units: dict[str, str]) -> list[str]:
    """The same of values and units that stand apart."""
    return [
        f"{parameter_name(key)} {_with_unit(exact(value), units.get(key, ''))}"
        for key, value in parameters.items()
    ]


def unit_of(candidate: Candidate | Closest, name: str) -> str:
    """Unit of a tuned value or of a setting; the record has it."""
    return candidate.get("units", {}).get(name, "")


def _with_unit(text: str, unit: str) -> str:
    return f"{text} {unit}" if unit else text


def fraction(compensator: Compensator, width: int) -> list[Text]:
    """C(s) in three lines, with corners written (s/corner + 1), so the gain is that at low frequency.

    Where that is too wide, numerator and denominator follow one another.
    """
    factors = compensator.get("factors")
    if factors is None:
        top, bottom = (_polynomial(compensator[part]) for part in ("numerator", "denominator"))
        return [hanging("  C(s) = ", f"{top}  over  {bottom}", width)]
    gain = factors["gain"]
    top, up = _corners(factors["zeros"])
    bottom, down = _corners(factors["poles"])
    lead = f"C(s) = {figure(gain * up / down, 5)}"
    if not bottom:
        return [hanging("  ", f"{lead} {top}".rstrip(), width)]
    top = top or "1"
    bar = max(len(top), len(bottom))
    pad = " " * (len(lead) + 3)
    if len(pad) + bar > width:
        return [hanging("  ", f"{lead} {top}", width), hanging("     over ", bottom, width)]
    return [
        Text(pad + top.center(bar).rstrip()),
        Text(f"  {lead} {'─' * bar}"),
        Text(pad + bottom.center(bar).rstrip()),
    ]


def _corners(roots: list[Pole]) -> tuple[str, float]:
    """Factors in corner form, and what Π(s - r) has to be divided by for them: (text, factor)."""
    words: list[str] = []
    factor = 1.0
    origin = sum(1 for r in roots if r == [0.0, 0.0] or (r[0] == 0.0 and r[1] == 0.0))
    if origin:
        words.append("s" if origin == 1 else f"s^{origin}")
    for re, im in roots:
        if im > 0.0:
            square = re * re + im * im
            factor *= square
            middle = -2.0 * re / square
            sign = "+" if middle >= 0.0 else MINUS
            words.append(f"(s²/{figure(square, 5)} {sign} {figure(abs(middle), 5)} s + 1)")
        elif im == 0.0 and re != 0.0:
            factor *= -re
            words.append(f"(s/{figure(-re, 5)} + 1)" if re < 0.0 else f"(1 {MINUS} s/{figure(re, 5)})")
    counted = list(dict.fromkeys(words))
    return " ".join(f"{w}²" if words.count(w) == 2 else w for w in counted), factor


def _polynomial(coefficients: list[float]) -> str:
    return "[" + ", ".join(f"{c:.9g}" for c in coefficients) + "]"


def forms(candidate: Candidate, spec: SpecPart, width: int) -> list[Text]:
    """The forms practitioners type in, a line each, then the coefficients."""
    gain_unit = plant_unit("u per y", spec)
    labels = [*candidate["settings"], "coefficients"]
    room = max(len(label) for label in labels) + 4
    out = []
    for form, values in candidate["settings"].items():
        parts = []
        for name, value in values.items():
            unit = unit_of(candidate, name)
            parts.append(
                f"{name} {quantity(value, unit, 5) if unit == 's' else _with_unit(figure(value, 5), unit)}"
            )
        if form == "one line":
            out.append(items(f"  {form}".ljust(room), one_line(values, candidate), width, between="; "))
        else:
            out.append(items(f"  {form}".ljust(room), [p.replace(MINUS, "-") for p in parts], width))
    block = candidate["compensator"]
    first = block["denominator"][0]  # divided out: a leading 1 is how most tools take them
    top, bottom = [c / first for c in block["numerator"]], [c / first for c in block["denominator"]]
    parts = [f"numerator {_polynomial(top)}", f"denominator {_polynomial(bottom)}"]
    out.append(items("  coefficients".ljust(room), parts, width, between=" "))
    if gain_unit != "u per y":
        text = f"A gain is in {gain_unit}; coefficients in descending powers of s."
        out.append(hanging("  ", text, width, style="dim"))
    return out


def one_line(values: dict[str, float], candidate: Candidate) -> list[str]:
    """A lead or a lag as one says it: "+38° at 12 rad/s", "corner ratio 4.2", "corners 6 and 25 rad/s".

    Before them stand the gain and, of a structure that has one, the integral time.
    """
    parts = []
    for name, value in values.items():
        prefix, _, last = name.rpartition("max phase")
        if last == "" and name.endswith("max phase"):
            at, ratio = values.get(f"{prefix}at"), values.get(f"{prefix}corner ratio")
            zero, pole = values.get(f"{prefix}zero corner"), values.get(f"{prefix}pole corner")
            if at is None or ratio is None or zero is None or pole is None:
                continue
            turn = ("+" if value > 0.0 else "") + figure(value, 3)
            low, high = sorted((zero, pole))
            parts.append(f"{prefix}{turn}° at {figure(at, 4)} rad/s")
            parts.append(f"corner ratio {figure(ratio, 4)}")
            parts.append(f"corners {figure(low, 4)} and {figure(high, 4)} rad/s")
        elif name in ("gain", "integral time"):
            unit = unit_of(candidate, name)
            parts.append(f"{name} {quantity(value, unit, 5) if unit == 's' else figure(value, 5)}")
    return parts


def poles_table(candidate: Candidate, width: int) -> list[Text]:
    """Closed-loop poles of the nominal case, largest share in the step first."""
    table = Columns(("<", ">", "<", ">", ">", ">", "<"), spare=((3,), (4,), (1,)))
    table.add("", "share of", "pole,", "period,", "decay to", "damping", "", style="dim")
    table.add("", "the step", "rad/s", "s", "1/e, s", "ratio", "", style="dim")
    for mode in candidate.get("modes", []):
        re, im = mode["pole"]
        size = (re * re + im * im) ** 0.5
        share = mode["share"]
        shown = "" if share is None else f"{figure(100.0 * float(share), 3)} %"
        table.add(
            "",
            shown,
            pole(re, im),
            figure(2.0 * 3.141592653589793 / im) if im else "",
            figure(-1.0 / re) if re else "",
            figure(-re / size if im else 1.0, 3) if size else "",
            "" if mode["counted"] else "not counted",
        )
    return table.lines(width)
