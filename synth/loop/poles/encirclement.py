"""How many roots of D(s) + N(s) e^(-s θ) lie right of a vertical line: an exact count.

M loops, n order of D. Scaled time. Nothing here knows an approximation of e^(-s θ).
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.crossing_count import count_by_crossings, squared_on_axis
from synth.loop.poles.roots import closed_roots
from synth.loop.polynomials import horner

# A crossing with abs(L) = 1 this close to -1 is a root on the line: stable means strictly left of it.
ON_THE_LINE = 1e-12


def delayed_stable(loops: Loops) -> BoolArray:
    """Whether every root of D + N e^(-s θ) lies strictly in the left half plane, and stays there under a
    small lag.

    loops : dead_time (M,) > 0. Returns (M,).
    abs(L(∞)) >= 1 is not stable (a chain of roots on or right of the axis), nor is a root on the axis, nor a
    row that is not finite.
    """
    count, touching = roots_right_of(loops, np.zeros(len(loops)))
    stable: BoolArray = (count == 0.0) & ~touching
    return stable


def chain_abscissa(loops: Loops) -> FloatArray:
    """Real part that the far roots tend to where L(∞) is not 0: ln abs(L(∞)) / θ; -inf where it is 0.
    (M,)."""
    with np.errstate(divide="ignore", invalid="ignore"):
        out: FloatArray = np.log(np.abs(loops.numerator[:, 0] / loops.denominator[:, 0])) / loops.dead_time
    return out


def roots_right_of(loops: Loops, line: FloatArray) -> tuple[FloatArray, BoolArray]:
    """Number of roots with real part above `line`, and whether one lies on the line itself.

    loops : dead_time (M,) > 0; line : (M,) scaled 1/time.
    Returns count (M,) as floats, inf where the far chain of roots is not left of the line, NaN for a row that
    is not finite; touching (M,).

    Notes
    -----
    By the crossings of the line as the delay grows from 0 (crossing_count.py); where those leave the count to
    rounding, by the argument principle on s = line + jω. Between the frequencies where abs(N) = abs(D), which
    are the real roots of a polynomial of degree n in ω², one of the two terms outweighs the other and the
    argument of the sum stays within 90 degrees of the argument of the larger. The argument of N and D follows
    from their roots and that of the delay is -ω θ, so the change of argument is known segment by segment with
    no sampling at all, and rounding would have to reach half a turn to spoil the count; a root within about
    1e-10 of the line is the exception.
    """
    rows, order = len(loops), loops.order
    with np.errstate(all="ignore"):  # rows that are not finite run on; they are NaN at the end
        denominator = moved(loops.denominator, line)
        numerator = moved(loops.numerator, line) * np.exp(-line * loops.dead_time)[:, None]
        gain = np.abs(numerator[:, 0]) / np.abs(denominator[:, 0])
        finite = np.isfinite(denominator).all(axis=1) & np.isfinite(numerator).all(axis=1)
        usable = np.flatnonzero(finite & (gain < 1.0))
        count = np.where(finite, np.inf, np.nan)
        touching = np.zeros(rows, dtype=bool)
        if order == 0:
            count[usable] = 0.0
            return count, touching
        found = count_by_crossings(denominator[usable], numerator[usable], loops.dead_time[usable])
        count[usable] = found
        open_ = usable[np.isnan(found)]
        if open_.size:
            change, near = _argument_change(denominator[open_], numerator[open_], loops.dead_time[open_])
            right = 0.5 * order - change / np.pi
            whole = np.round(right)
            count[open_] = np.where(np.abs(right - whole) < 0.25, whole, np.nan)
            touching[open_] = near
    return count, touching


def moved(polynomials: FloatArray, shift: FloatArray) -> FloatArray:
    """Coefficients of p(s + shift), row by row, by repeated synthetic division. (M, n + 1), (M,) -> (M, n +
    1)."""
    out = polynomials.copy()
    if not shift.any():
        return out
    width = out.shape[1]
    for last in range(width - 1, 0, -1):
        for k in range(1, last + 1):
            out[:, k] += shift * out[:, k - 1]
    return out


def unit_crossings(denominator: FloatArray, numerator: FloatArray) -> FloatArray:
    """Frequencies ω > 0 with abs(N(jω)) = abs(D(jω)), ascending, padded with inf. (M, n + 1) twice -> (M,
    n)."""
    squares = closed_roots(squared_on_axis(denominator) - squared_on_axis(numerator))
    real = (squares.imag == 0.0) & (squares.real > 0.0)
    out: FloatArray = np.sort(np.sqrt(np.where(real, squares.real, np.inf)), axis=1)
    return out


def _argument_change(
    denominator: FloatArray, numerator: FloatArray, delay: FloatArray
) -> tuple[FloatArray, BoolArray]:
    """Change of arg(D + N e^(-jωθ)) from ω = 0 to ∞, less the bounded swing of the far chain; and roots met.

    Above a crossing where N takes over, half of arg L is gained at the end of D's segment and, with the other
    sign, half at the start of N's: together the whole of arg L in (-π, π], plus or minus.
    """
    crossing = unit_crossings(denominator, numerator)
    there = np.isfinite(crossing)
    at = np.where(there, crossing, 0.0)
    loop = horner(numerator, 1j * at) / horner(denominator, 1j * at) * np.exp(-1j * at * delay[:, None])
    angle = np.where(there, np.angle(loop), 0.0)
    # D outweighs N beyond the last crossing; the two take turns below it
    beyond = there[:, ::-1].cumsum(axis=1)[:, ::-1]
    numerator_above = there & (beyond % 2 == 0)
    change = np.where(numerator_above, angle, -angle).sum(axis=1)

    from_d, from_n = closed_roots(denominator), closed_roots(numerator)
    final = -np.sign(from_d.real).sum(axis=1) * (np.pi / 2.0)
    edges = np.concatenate([np.zeros((len(at), 1)), at], axis=1)
    arg_d, arg_n = _argument(from_d, edges), _argument(from_n, edges) - edges * delay[:, None]
    by_numerator = np.concatenate([(there.sum(axis=1) % 2 == 1)[:, None], numerator_above], axis=1)
    last = there.sum(axis=1)
    for k in range(crossing.shape[1]):
        inside = there[:, k]
        step = np.where(by_numerator[:, k], arg_n[:, k + 1] - arg_n[:, k], arg_d[:, k + 1] - arg_d[:, k])
        change += np.where(inside, step, 0.0)
    change += final - np.take_along_axis(arg_d, last[:, None], axis=1)[:, 0]
    at_zero = denominator[:, -1] + numerator[:, -1] == 0.0
    near: BoolArray = at_zero | (there & (np.abs(1.0 + loop) < ON_THE_LINE)).any(axis=1)
    return change, near


def _argument(roots: ComplexArray, frequency: FloatArray) -> FloatArray:
    """arg of the product of (jω - p), continuous in ω and up to a constant. (M, r), (M, f) -> (M, f).

    A root on the axis counts nothing: where a polynomial outweighs the other it has none there.
    """
    side = np.sign(roots.real)
    rise = np.arctan2(frequency[:, :, None] - roots.imag[:, None, :], np.abs(roots.real)[:, None, :])
    out: FloatArray = -np.nansum(side[:, None, :] * rise, axis=2)
    return out
