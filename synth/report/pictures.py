"""Pictures of a candidate in the terminal: step responses, loop gain, root locus, as in the record."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from rich.text import Text

from synth.record import Candidate, Requirement, number
from synth.report.canvas import Chart, Line
from synth.report.theme import heading
from synth.report.view import View
from synth.wording.figures import figure, pole, unit_for

STEP_ROWS, LOOP_ROWS, PHASE_ROWS, LOCUS_ROWS = 13, 10, 6, 17
WIDEST_PICTURE = 100
_PENS: tuple[tuple[str, Line, str], ...] = (
    ("first", "solid", "━━"),
    ("second", "dashed", "╍╍"),
    ("third", "dotted", "┈┈"),
)


def _columns(width: int) -> int:
    return min(width, WIDEST_PICTURE) - 12


def _floats(values: Sequence[Any]) -> list[float]:
    return [number(v) for v in values]


def step(view: View, candidates: Sequence[Candidate], width: int) -> list[Text]:
    """Reference steps of up to three candidates over one another, nominal plant; limits drawn thin."""
    drawn = [(c, c["curves"]["step"]) for c in candidates[:3] if c["curves"].get("step", {}).get("t")]
    if not drawn:
        return []
    times = [_floats(curve["t"]) for _, curve in drawn]
    heights = [_floats(curve["y"]) for _, curve in drawn]
    end = min(max(t[-1] for t in times), 2.5 * times[0][-1])
    overshoot = _bound(view, "overshoot", "max")
    settling = _bound(view, "settling_time", "max")
    if settling is not None and settling["limit"] < 4.0 * end:
        end = max(end, 1.1 * settling["limit"])
    finite = [v for h in heights for v in h if math.isfinite(v)]
    low, high = min(0.0, *finite), max(1.0, *finite)
    if overshoot is not None and overshoot["limit"] < 60.0:
        high = max(high, 1.0 + overshoot["limit"] / 100.0)
    room = 0.06 * (high - low)
    scale = unit_for("s", [end])
    chart = Chart((0.0, end / scale.factor), (low - room, high + room), _columns(width), STEP_ROWS)
    chart.level(1.0, "")
    if overshoot is not None and 0.0 < overshoot["limit"] < 60.0:
        final = view.nominal(drawn[0][0], "final_value")
        if math.isfinite(final):
            chart.level(final * (1.0 + overshoot["limit"] / 100.0), "overshoot limit")
    if settling is not None:
        chart.upright(settling["limit"] / scale.factor, f"settled by {scale.full(settling['limit'])}")
    # the first candidate is drawn last, over the others
    for (style, kind, _), t, h in reversed(list(zip(_PENS, times, heights, strict=False))):
        chart.curve([v / scale.factor for v in t], h, style, kind)
    legend = Text("  ")
    for (style, _, sample), (c, _) in zip(_PENS, drawn, strict=False):
        legend.append(sample, style=style)
        legend.append(f" {c['rank']} {c['structure']}   ")
    legend.rstrip()
    return [
        heading("Reference step", "y for a unit step of r, nominal plant", width),
        legend,
        *chart.lines(scale.word, ""),
    ]


def effort(view: View, candidate: Candidate, width: int) -> list[Text]:
    """What the compensator puts out on the reference step of the sheet, nominal plant."""
    curve = candidate["curves"].get("step", {})
    t, u = _floats(curve.get("t", [])), _floats(curve.get("u", []))
    finite = [v for v in u if math.isfinite(v)]
    if not t or not finite:
        return []
    size = view.record["spec"].get("reference_step", 1.0)
    u = [size * v for v in u]
    low, high = min(0.0, *(size * v for v in finite)), max(0.0, *(size * v for v in finite))
    limit = _bound(view, "control_peak", "max")
    if limit is not None and limit["limit"] < 2.0 * max(abs(low), abs(high)):
        high = max(high, limit["limit"])
    room = 0.05 * (high - low) or 1.0
    scale = unit_for("s", [t[-1]])
    chart = Chart((0.0, t[-1] / scale.factor), (low - room, high + room), _columns(width), PHASE_ROWS)
    chart.level(0.0, "")
    if limit is not None:
        chart.level(limit["limit"], "control peak limit")
        chart.level(-limit["limit"], "control peak limit")
    chart.curve([v / scale.factor for v in t], u, "first")
    unit = view.quantity_unit("control_peak")
    step = f"{figure(size)} {view.output_unit}".rstrip()
    head = "u" if unit == "u" else f"u, {unit},"
    return [
        heading("Control", f"{head} for a reference step of {step}", width),
        *chart.lines(scale.word, ""),
    ]


def loop_gain(candidate: Candidate, width: int) -> list[Text]:
    """abs(L) and its phase over frequency, crossovers marked; nominal plant."""
    curve: Any = candidate["curves"].get("loop", {})
    w, gain, phase = (_floats(curve.get(key, [])) for key in ("w", "gain_db", "phase_deg"))
    finite = [g for g in gain if math.isfinite(g)]
    if len(w) < 2 or not finite:
        return []
    low, high = max(min(finite), -60.0), min(max(finite), 80.0)
    chart = Chart((w[0], w[-1]), (min(low, -10.0), max(high, 10.0)), _columns(width), LOOP_ROWS, log_x=True)
    chart.level(0.0, "")
    chart.curve(w, gain, "first")
    under = Chart((w[0], w[-1]), _phase_range(phase), _columns(width), PHASE_ROWS, log_x=True)
    under.level(-180.0, "-180°".replace("-", "−"))
    under.curve(w, phase, "first")
    for i in range(1, len(w)):
        if gain[i - 1] * gain[i] <= 0.0 and gain[i - 1] != gain[i]:
            part = gain[i - 1] / (gain[i - 1] - gain[i])
            at = w[i - 1] * (w[i] / w[i - 1]) ** part
            chart.mark(at, 0.0, "◆", "first")
            under.mark(at, phase[i - 1] + part * (phase[i] - phase[i - 1]), "◆", "first")
    upper = chart.lines("", "  abs(L), dB", least_margin=5)[:-2]
    return [
        heading("Loop gain", "L = C P on the nominal plant; ◆ where abs(L) is 1", width),
        *upper,
        *under.lines("rad/s", "  phase of L, deg", least_margin=5),
    ]


def _phase_range(phase: Sequence[float]) -> tuple[float, float]:
    finite = [p for p in phase if math.isfinite(p)] or [0.0]
    low = max(math.floor(min(finite) / 90.0) * 90.0, -540.0)
    high = math.ceil(max(finite) / 90.0) * 90.0
    return (low - 10.0, high + 10.0) if high > low else (low - 90.0, high + 90.0)


def locus(view: View, candidate: Candidate, width: int) -> list[Text]:
    """Poles of the nominal closed loop as the gain of C goes from 0 to infinity, upper half plane."""
    curves = candidate["curves"].get("root_locus") or {}
    branches = curves.get("branches", [])
    points = curves.get("points", [])
    if not branches and not points:
        return []
    closed = [(re, abs(im)) for re, im in curves.get("closed", [])]
    starts = [(re, abs(im)) for re, im in curves.get("poles", [])]
    ends = [(re, abs(im)) for re, im in curves.get("zeros", [])]
    left, right, top = _window(closed, starts, ends, view, candidate)
    columns = _columns(width)
    # a dot is square, so angles (damping ratios) are true
    wide = max(right - left, top * (2.0 * columns) / (4.0 * (LOCUS_ROWS - 1)))
    left = right - wide
    top = wide * 4.0 * (LOCUS_ROWS - 1) / (2.0 * columns)
    chart = Chart((left, right), (-top / (LOCUS_ROWS - 1), top), columns, LOCUS_ROWS)
    chart.curve((left, right), (0.0, 0.0), "axis", "sparse")
    chart.curve((0.0, 0.0), (0.0, top), "axis", "sparse")
    _boundaries(chart, view, left, top)
    kinds: tuple[Line, ...] = ("solid", "long")
    for i, branch in enumerate(branches):
        chart.curve(_floats(branch["re"]), [abs(v) for v in _floats(branch["im"])], "second", kinds[i % 2])
    for re, im in points:
        x, y = chart.place(re, abs(im))
        chart.canvas.dot(math.floor(x), math.floor(y), "second")
    for roots, letter, style in ((starts, "×", "head"), (ends, "○", "head"), (closed, "◆", "first")):
        for re, im in roots:
            chart.mark(re, im, letter, style)
    outside = [(re, im) for re, im in closed if not (left <= re <= right and im <= top)]
    lines = [
        heading("Root locus", "gain of C from 0 up; × open loop, ○ zeros, ◆ closed loop; upper half", width)
    ]
    lines.extend(chart.lines("rad/s", ""))
    if outside:
        far = ", ".join(pole(re, im) for re, im in sorted(set(outside)))
        lines.append(Text(f"  outside the picture: closed-loop poles at {far}", style="dim"))
    return lines


def _window(
    closed: list[tuple[float, float]],
    starts: list[tuple[float, float]],
    ends: list[tuple[float, float]],
    view: View,
    candidate: Candidate,
) -> tuple[float, float, float]:
    """Left, right, top: the counted closed-loop poles fill most of it; what lies far beyond stays outside."""
    counted = [math.hypot(*m["pole"]) for m in candidate.get("modes", []) if m["counted"]]
    sizes = sorted(counted or [math.hypot(*p) for p in closed] or [1.0])
    core = sizes[len(sizes) // 2] if len(sizes) > 3 else sizes[-1]
    reach = 1.15 * max([s for s in sizes if s <= 6.0 * core] or sizes)
    near = [p for p in (*closed, *starts, *ends) if math.hypot(*p) <= 1.6 * reach]
    left = min([-0.2 * reach, *(1.15 * re for re, _ in near)])
    right = max([0.2 * reach, *(1.15 * re for re, _ in near)])
    top = max([0.3 * reach, *(1.25 * im for _, im in near)])
    return left, right, top


def _boundaries(chart: Chart, view: View, left: float, top: float) -> None:
    """Damping and decay that the sheet asks for, as thin labelled lines."""
    damping = _bound(view, "damping_ratio", "min")
    if damping is not None and 0.0 < damping["limit"] < 1.0:
        slope = math.sqrt(1.0 / damping["limit"] ** 2 - 1.0)
        end = max(left, -top / slope)
        chart.curve((0.0, end), (0.0, -slope * end), "axis", "sparse")
        x, y = chart.place(end, -slope * end)
        chart.canvas.word(int(x // 2) + 1, max(0, int(y // 4)), f"damping {figure(damping['limit'])}", "axis")
    decay = _bound(view, "decay_rate", "min")
    if decay is not None and decay["limit"] > 0.0:
        chart.upright(-decay["limit"], f"decay {figure(decay['limit'])} 1/s")


def _bound(view: View, quantity: str, side: str) -> Requirement | None:
    """The first requirement on that side of a quantity, where the sheet has one."""
    found = (r for r in view.record["requirements"] if r["quantity"] == quantity and r["bound"] == side)
    return next(found, None)
