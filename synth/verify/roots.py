"""Closed-loop poles again, to 50 digits where that matters.

Without dead time the characteristic polynomial is formed exactly and its roots are refined by Aberth's
iteration in fixed point on Python's integers. With dead time there are infinitely many. Seeds come from a
matrix, the generator of the delay equation on Chebyshev points, and from the chain of roots that follows it;
Newton's method settles them, a root that double precision leaves in doubt is polished with 50 digits, and
the argument principle tells whether any is missing as far out as they are needed.

Sources: O. Aberth, Iteration methods for finding all zeros of a polynomial simultaneously, Math. Comp. 27
(1973) 339-344; D. Breda, S. Maset and R. Vermiglio, Pseudospectral differencing methods for characteristic
roots of delay differential equations, SIAM J. Sci. Comput. 27 (2005) 482-495.
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.verify.subject import Subject

_BITS = 180  # 54 digits
_MOST = 40
_POINTS = (24, 48)
_SEEDS = 12  # of the chain, beyond what is asked for
_FARTHEST = 3000.0  # abs(p) θ
_DOUBT = 1e-9  # relative error of a root above which it is polished

Fixed = tuple[int, int]  # real and imaginary part in units of 2^-_BITS


def poles(subject: Subject, reach: float = 0.0) -> ComplexArray | None:
    """All poles [1/s]; with dead time those with abs(p) <= reach and a few dozen nearest the origin.

    None where some may be missing: their sums do not fit the coefficients, or, with dead time, their number
    the count of the argument principle, or `reach` is too far.
    """
    if subject.dead_time == 0.0:
        found = refined(subject.closed)
        return found if _complete(found, subject.closed) else None
    return _delayed(subject, reach)


def chain(subject: Subject) -> float:
    """Decay rate [1/s] that the poles of a loop with dead time and a direct path tend to; inf without one."""
    above, below = subject.exact
    if subject.dead_time == 0.0 or above[0] == 0:
        return np.inf
    return float(-np.log(abs(float(above[0] / below[0]))) / subject.dead_time)


def refined(closed: Sequence[Fraction]) -> ComplexArray:
    """Roots of a polynomial with exact coefficients, descending, the first not 0; right to rounding of the
    result."""
    degree = len(closed) - 1
    if degree < 1:
        return np.empty(0, dtype=complex)
    zeros = 0
    while closed[-1] == 0:
        closed, zeros = closed[:-1], zeros + 1
    degree -= zeros
    if degree < 1:
        return np.zeros(zeros, dtype=complex)
    # the variable is stretched by a power of two so that the roots lie round 1
    power = round((_log2(closed[-1]) - _log2(closed[0])) / degree)
    monic = [c / closed[0] / Fraction(2) ** (power * k) for k, c in enumerate(closed)]
    start = np.roots([float(c) for c in monic])
    digits = [_to_fixed(c) for c in monic]
    out = [
        _polish(digits, complex(r), [complex(q) for i, q in enumerate(start) if i != k])
        for k, r in enumerate(start)
    ]
    return np.concatenate((np.array(out) * 2.0**power, np.zeros(zeros)))


def _complete(roots: ComplexArray, closed: Sequence[Fraction]) -> bool:
    """Whether the sums of the roots and of their inverses are the polynomial's: no root found twice."""
    if len(roots) != len(closed) - 1 or not np.isfinite(roots).all():
        return False
    if not roots.size or closed[-1] == 0:
        return True
    sums = ((roots, closed[1] / closed[0]), (1.0 / roots, closed[-2] / closed[-1]))
    return all(abs(complex(q.sum()) + float(c)) <= 1e-9 * float(np.abs(q).sum()) for q, c in sums)


def _log2(value: Fraction) -> float:
    value = abs(value)
    return (value.numerator.bit_length() - value.denominator.bit_length()) + 0.0


def _to_fixed(value: Fraction) -> int:
    return (value.numerator << _BITS) // value.denominator if value >= 0 else -_to_fixed(-value)


def _polish(coefficients: list[int], start: complex, others: list[complex]) -> complex:
    """Aberth's iteration for one root; the others stand where double precision put them."""
    re, im = int(start.real * 2.0**60) << (_BITS - 60), int(start.imag * 2.0**60) << (_BITS - 60)
    for _ in range(_MOST):
        p, q, dp, dq = coefficients[0], 0, 0, 0
        for c in coefficients[1:]:
            dp, dq = ((dp * re - dq * im) >> _BITS) + p, ((dp * im + dq * re) >> _BITS) + q
            p, q = ((p * re - q * im) >> _BITS) + c, (p * im + q * re) >> _BITS
        if p == 0 and q == 0:
            break
        size = dp * dp + dq * dq
        if size == 0:
            break
        step_re, step_im = ((p * dp + q * dq) << _BITS) // size, ((q * dp - p * dq) << _BITS) // size
        step = complex(step_re / (1 << _BITS), step_im / (1 << _BITS))
        here = complex(re / (1 << _BITS), im / (1 << _BITS))
        repulsion = sum((1.0 / (here - o) for o in others if o != here), 0j)
        factor = 1.0 - step * repulsion
        # the repulsion matters while roots crowd; once the step is small plain Newton keeps all digits
        if abs(step) > 1e-9 * abs(here) and abs(factor) > 0.1:
            step /= factor
            step_re, step_im = (
                int(step.real * 2.0**100) << (_BITS - 100),
                int(step.imag * 2.0**100) << (_BITS - 100),
            )
        re, im = re - step_re, im - step_im
        if abs(step) < 1e-30 * max(abs(here), 1e-9):
            break
    return complex(re / (1 << _BITS), im / (1 << _BITS))


def _delayed(subject: Subject, reach: float) -> ComplexArray | None:
    """Roots of D(s) + N(s) e^(-sθ); inside they are counted in units of 1/θ."""
    (d, b), delay = _in_dead_times(subject), subject.dead_time
    far = max(reach * delay, 25.0)
    if far > _FARTHEST:
        return None
    for points in _POINTS:
        with np.errstate(all="ignore"):
            along = _chain(d, b, int(far / (2.0 * np.pi)) + _SEEDS)
            seeds = np.concatenate((_generated(d, b, points), along, np.roots(d)))
            upper = _settled(d, b, seeds)
            # the count is taken on a circle that keeps clear of the roots known
            circles = far * np.linspace(1.0, 1.1, 12)
            clear = np.abs(np.abs(upper) - circles[:, None]).min(axis=1, initial=np.inf)
            circle = float(circles[clear.argmax()])
            within = upper[np.abs(upper) < circle]
            if int((within.imag > 0.0).sum() * 2 + (within.imag == 0.0).sum()) == _count(d, b, circle):
                upper = _polished(subject, d, b, upper) / delay
                return np.concatenate((upper, upper[upper.imag > 0.0].conj()))
    return None


def _in_dead_times(subject: Subject) -> tuple[FloatArray, FloatArray]:
    """D and N for time counted in dead times, D's first coefficient 1."""
    above, below = subject.exact
    grown = subject.dead_time ** np.arange(len(below))
    d, b = (np.array([float(c / below[0]) for c in q]) * grown for q in (below, above))
    return d, b


def _generated(d: FloatArray, b: FloatArray, points: int) -> ComplexArray:
    """Eigenvalues of the generator on (x, output over the last dead time), near the origin close to poles."""
    n = len(d) - 1
    x, difference = _chebyshev(points)
    assert x[0] == 0.0
    # x' = A x - e w(-1), w(0) = c x - k w(-1) at the newest point, dw/dt = dw/dx at all older ones
    a = np.diag(np.ones(max(n - 1, 0)), 1)[:n, :n]
    if n:
        a[-1] = -d[1:][::-1]
    k = b[0]
    c = (b[1:] - k * d[1:])[::-1]
    matrix = np.zeros((n + points, n + points))
    matrix[:n, :n] = a
    if n:
        matrix[n - 1, -1] = -1.0
    matrix[n:, :n] = np.outer(difference[1:, 0], c)
    matrix[n:, n:] = difference[1:, 1:]
    matrix[n:, -1] -= k * difference[1:, 0]
    roots = np.linalg.eigvals(matrix)
    out: ComplexArray = roots[(roots.imag >= 0.0) & (np.abs(roots) < 2.0 * points)].astype(complex)
    return out


def _chain(d: FloatArray, b: FloatArray, count: int) -> ComplexArray:
    """The far roots: p = log(-N/D) + 2πik, iterated."""
    turn = 2j * np.pi * np.arange(1, count + 1)
    p = turn.copy()
    for _ in range(6):
        p = turn + np.log(-np.polyval(b, p) / np.polyval(d, p))
    return np.concatenate((p, p - 2j * np.pi))[np.isfinite(np.concatenate((p, p)))]


def _settled(d: FloatArray, b: FloatArray, roots: ComplexArray) -> ComplexArray:
    """Newton's method on D(p) + N(p) e^(-p): the different roots reached, upper half only."""
    dd, db = np.polyder(d), np.polyder(b)
    step = np.full(len(roots), np.inf, dtype=complex)
    for _ in range(8):
        e = np.exp(-roots)
        n = np.polyval(b, roots)
        step = (np.polyval(d, roots) + n * e) / (np.polyval(dd, roots) + (np.polyval(db, roots) - n) * e)
        roots = roots - step
    size = np.abs(roots)
    roots = roots[np.isfinite(roots) & (np.abs(step) < 1e-9 * size)]
    real = np.abs(roots.imag) <= 1e-9 * np.abs(roots)
    roots = np.where(real, roots.real, roots.real + 1j * np.abs(roots.imag))
    near = np.abs(roots[:, None] - roots) <= 1e-7 * np.abs(roots)
    out: ComplexArray = roots[~np.tril(near, -1).any(axis=1)]
    return out


def _count(d: FloatArray, b: FloatArray, radius: float) -> int:
    """Roots with abs(p) < radius, by the turns of D + N e^(-p) along the upper half circle."""
    angle = np.linspace(0.0, np.pi, int(200 + 12 * radius))
    for _ in range(8):
        p = radius * np.exp(1j * angle)
        turned = _turned(d, b, p)
        wide = np.flatnonzero(np.abs(turned) > 1.0)
        if not wide.size:
            break
        angle = np.insert(angle, wide + 1, 0.5 * (angle[wide] + angle[wide + 1]))
    total = turned.sum() / np.pi
    return round(float(total)) if np.isfinite(total) else -1


def right_of(subject: Subject, decay: float) -> int | None:
    """How many poles of a loop with dead time have Re p > -decay, by the turns of D + N e^(-sθ) along that
    line; None where the line is too long. With a direct path `decay` must be below that of the chain."""
    d, b = _in_dead_times(subject)
    x = -decay * subject.dead_time
    # from here on |N e^(-p)| stays below |D|, which turns as p^n does
    w = np.geomspace(1e-9, _FARTHEST, 4000)
    p: ComplexArray = (x + 1j * w).astype(complex)
    open_loop = np.abs(np.polyval(b, p) / np.polyval(d, p)) * np.exp(-x)
    above_one = np.flatnonzero(~(open_loop < 0.97))
    if above_one.size and above_one[-1] > len(w) - 20:
        return None
    end = max(w[above_one[-1]] if above_one.size else 0.0, float(np.abs(np.roots(d)).max(initial=1.0)), 1.0)
    turns = np.arange(0.0, min(4.0 * end, _FARTHEST), 0.3)
    w = np.unique(np.concatenate((turns, np.geomspace(1e-9, 4.0 * end, 1000))))
    for _ in range(30):
        p = (x + 1j * w).astype(complex)
        turned = _turned(d, b, p)
        wide = np.flatnonzero(np.abs(turned) > 1.0)
        if not wide.size:
            break
        w = np.insert(w, wide + 1, 0.5 * (w[wide] + w[wide + 1]))
    n = len(d) - 1
    # what D still turns beyond the end: to nπ/2 in all
    last = p[-1]
    loop = np.angle(1.0 + np.polyval(b, last) / np.polyval(d, last) * np.exp(-last))
    rest = sum(0.5 * np.pi - np.angle(last - root) for root in np.roots(d)) - loop
    total = turned.sum() + float(rest)
    return round(0.5 * n - total / np.pi) if np.isfinite(total) else None


def _turned(d: FloatArray, b: FloatArray, p: ComplexArray) -> FloatArray:
    """How far D + N e^(-p) turns from each point to the next, the points close enough; no overflow."""
    left = p.real < 0.0
    # to the left it is multiplied by e^Re p, which turns nothing
    grown, shrunk = np.exp(np.where(left, p.real, 0.0)), np.exp(np.where(left, 0.0, -p.real))
    value = np.polyval(d, p) * grown + np.polyval(b, p) * shrunk * np.exp(-1j * p.imag)
    out: FloatArray = np.angle(value[1:] / value[:-1])
    return out


def _polished(subject: Subject, d: FloatArray, b: FloatArray, roots: ComplexArray) -> ComplexArray:
    """The roots whose rounding error is not small, refined with 50 digits."""
    e = np.exp(-roots)
    size = np.abs(roots)
    terms = np.polyval(np.abs(d), size) + np.polyval(np.abs(b), size) * np.abs(e)
    slope = np.polyval(np.polyder(d), roots) + (np.polyval(np.polyder(b), roots) - np.polyval(b, roots)) * e
    roots = roots.astype(complex)
    for i in np.flatnonzero(1e-15 * terms > _DOUBT * size * np.abs(slope)):
        roots[i] = _newton_exact(subject, complex(roots[i]), complex(slope[i]))
    return roots


def _newton_exact(subject: Subject, root: complex, slope: complex) -> complex:
    """Newton's method for one root [1/θ]: the residue in fixed point, the slope as it is known."""
    (above, below), delay = subject.exact, Fraction(subject.dead_time)
    # the variable is stretched by a power of two so that the root lies round 1
    power = round(float(np.log2(abs(root))))
    size = Fraction(2) ** power
    n = len(below) - 1
    rows = [[c / below[0] * delay**k * size ** (n - k) for k, c in enumerate(q)] for q in (below, above)]
    scale = max(abs(c) for row in rows for c in row)
    fixed = [[_to_fixed(c / scale) for c in row] for row in rows]
    factor = float(scale / size) / slope
    re, im = (_to_fixed(Fraction(x) / size) for x in (root.real, root.imag))
    for _ in range(_MOST):
        (dr, di), (nr, ni) = (_value(row, re, im) for row in fixed)
        er, ei = _exponential(_shifted(-re, power), _shifted(-im, power))
        fr, fi = dr + ((nr * er - ni * ei) >> _BITS), di + ((nr * ei + ni * er) >> _BITS)
        step = complex(fr / (1 << _BITS), fi / (1 << _BITS)) * factor
        re, im = re - _to_fixed(Fraction(step.real)), im - _to_fixed(Fraction(step.imag))
        if abs(step) < 1e-17:
            break
    return complex(re / (1 << _BITS), im / (1 << _BITS)) * float(size)


def _value(row: list[int], re: int, im: int) -> Fixed:
    """A polynomial with real coefficients in fixed point."""
    p, q = row[0], 0
    for c in row[1:]:
        p, q = ((p * re - q * im) >> _BITS) + c, (p * im + q * re) >> _BITS
    return p, q


def _shifted(x: int, power: int) -> int:
    return x << power if power >= 0 else x >> -power


def _exponential(re: int, im: int) -> Fixed:
    """e^z in fixed point: the series of z/2^k, squared k times."""
    halvings = max(0, max(abs(re), abs(im)).bit_length() - _BITS + 8)
    re, im = re >> halvings, im >> halvings
    tr, ti = 1 << _BITS, 0
    sr, si = tr, ti
    for k in range(1, 40):
        tr, ti = ((tr * re - ti * im) >> _BITS) // k, ((tr * im + ti * re) >> _BITS) // k
        if tr in (0, -1) and ti in (0, -1):
            break
        sr, si = sr + tr, si + ti
    for _ in range(halvings):
        sr, si = (sr * sr - si * si) >> _BITS, (sr * si) >> (_BITS - 1)
    return sr, si


def _chebyshev(count: int) -> tuple[FloatArray, FloatArray]:
    """Chebyshev points on [-1, 0], from 0 downwards, and the differentiation matrix on them."""
    k = np.arange(count + 1)
    x = 0.5 * (np.cos(np.pi * k / count) - 1.0)
    weight = np.where((k == 0) | (k == count), 2.0, 1.0) * (-1.0) ** k
    gap = x[:, None] - x[None, :] + np.eye(count + 1)
    matrix = weight[:, None] / weight[None, :] / gap
    matrix -= np.diag(matrix.sum(axis=1))
    return x, matrix
