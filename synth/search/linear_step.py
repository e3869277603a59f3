"""The step of a maximin polish: a stack of tiny programmes solved together by one interior-point iteration.

S programmes, V variables (1 to 5), C slacks, G cases of the quantity to improve. Each programme is

    maximise    u + ρ t - ½ dᵀ H d
    subject to  t <= s_r + g_r·d  (r = 1..C),   t <= cap,   u <= f_k + h_k·d  (k = 1..G),   low <= d <= high

Without f, H and cap it is the linear programme of a maximin step; with f and a cap it is the step of an exact
penalty, which improves the worst case of one quantity while every slack stays above a reserve; with H it
follows curvature.

Source: S. Mehrotra, "On the implementation of a primal-dual interior point method", SIAM J. Optimization 2
(1992) 575-601: predictor, corrector, and the choice of the centring by the cube of the predicted fall of the
gap.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray

ITERATIONS = 25  # most of them end after 8 to 14


@dataclass(frozen=True, slots=True)
class Step:
    """d (S, V), the level t (S,) it promises, and the multipliers of the slacks (S, C) and of the cases (S,
    G)."""

    d: FloatArray
    level: FloatArray
    multipliers: FloatArray
    gain_multipliers: FloatArray


def maximin_step(
    slack: FloatArray,
    slope: FloatArray,
    low: FloatArray,
    high: FloatArray,
    *,
    gain: FloatArray | None = None,
    gain_slope: FloatArray | None = None,
    weight: float = 1.0,
    cap: FloatArray | float = np.inf,
    curvature: FloatArray | None = None,
) -> Step:
    """Solve the S programmes of the module's head.

    Parameters
    ----------
    slack, slope : (S, C) s and (S, C, V) g; s = +inf where a programme has no such constraint.
    low, high : (S, V), low <= 0 <= high; both 0 freezes a variable.
    gain, gain_slope : (S, G) f and (S, G, V) h; +inf where absent, but at least one a programme is finite.
    weight : ρ > 0.  cap : (S,).  curvature : (S, V, V) H, positive semidefinite.

    Returns
    -------
    Step; accurate to about 1e-8 of the slacks' spread (test_linear_step compares with
    scipy.optimize.linprog).
    """
    count, constraints = slack.shape
    variables = slope.shape[2]
    if (
        slope.shape != (count, constraints, variables)
        or low.shape != (count, variables)
        or low.shape != high.shape
    ):
        raise ValueError(
            f"slack {slack.shape}, slope {slope.shape}, low {low.shape}, high {high.shape} do not fit"
        )
    size = np.maximum(
        high - low, 1e-300
    )  # variables in units of their room, so that every programme looks alike
    free = high > low
    levels = 1 if gain is None or gain_slope is None else 2
    rows = _Rows(count, variables, levels)
    rows.level(slack, slope * size[:, None, :], 0)
    if gain is not None and gain_slope is not None:
        rows.level(gain, gain_slope * size[:, None, :], 1)
    rows.cap(np.broadcast_to(np.asarray(cap, dtype=float), (count,)))
    rows.box(low / size, high / size, free)
    cost = np.zeros((count, variables + levels))
    cost[:, variables] = -weight
    cost[:, variables + 1 :] = -1.0
    hessian = np.zeros((count, variables + levels, variables + levels))
    if curvature is not None:
        hessian[:, :variables, :variables] = curvature * (size[:, :, None] * size[:, None, :])
    frozen = np.arange(variables)
    hessian[:, frozen, frozen] += np.where(
        free, 0.0, 1.0
    )  # a frozen variable has no constraint: hold it at 0
    point, multipliers = _interior_point(*rows.stacked(), cost, hessian, variables)
    d = np.where(free, np.clip(point[:, :variables] * size, low, high), 0.0)
    cases = gain.shape[1] if gain is not None else 0
    return Step(
        d,
        point[:, variables],
        multipliers[:, :constraints],
        multipliers[:, constraints : constraints + cases],
    )


class _Rows:
    """Gathers A y <= b in y = (d, t[, u]). A row that a programme does not have is switched off there."""

    def __init__(self, count: int, variables: int, levels: int) -> None:
        self.count, self.variables, self.width = count, variables, variables + levels
        self.matrices: list[FloatArray] = []
        self.rights: list[FloatArray] = []
        self.switches: list[FloatArray] = []

    def _add(self, matrix: FloatArray, right: FloatArray, on: BoolArray) -> None:
        self.matrices.append(np.where(on[:, :, None], matrix, 0.0))
        self.rights.append(np.where(on, right, 1.0))
        self.switches.append(on.astype(float))

    def level(self, value: FloatArray, slope: FloatArray, which: int) -> None:
        """level_which <= value + slope·d, for (S, C) values."""
        matrix = np.zeros((*value.shape, self.width))
        matrix[:, :, : self.variables] = -slope
        matrix[:, :, self.variables + which] = 1.0
        self._add(matrix, value, np.isfinite(value))

    def cap(self, cap: FloatArray) -> None:
        """t <= cap."""
        matrix = np.zeros((self.count, 1, self.width))
        matrix[:, 0, self.variables] = 1.0
        self._add(matrix, cap[:, None], np.isfinite(cap)[:, None])

    def box(self, low: FloatArray, high: FloatArray, free: BoolArray) -> None:
        """low <= d <= high."""
        for bound, sign in ((high, 1.0), (low, -1.0)):
            matrix = np.zeros((self.count, self.variables, self.width))
            matrix[:, np.arange(self.variables), np.arange(self.variables)] = sign
            self._add(matrix, sign * bound, free)

    def stacked(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """A (S, rows, width), b (S, rows), and 1 where a row exists."""
        return (
            np.concatenate(self.matrices, 1),
            np.concatenate(self.rights, 1),
            np.concatenate(self.switches, 1),
        )


def _interior_point(
    matrix: FloatArray,
    right: FloatArray,
    binding: FloatArray,
    cost: FloatArray,
    hessian: FloatArray,
    variables: int,
) -> tuple[FloatArray, FloatArray]:
    """min cost·y + ½ yᵀ H y, A y <= b. Returns y (S, width) and the multipliers (S, rows)."""
    number = np.maximum(binding.sum(axis=1), 1.0)
    y = np.zeros_like(cost)
    for level in range(variables, cost.shape[1]):  # each level starts below all that holds it down
        y[:, level] = np.where(matrix[:, :, level] > 0.0, right, np.inf).min(axis=1) - 0.5
    scale = np.abs(cost).max(axis=1)
    room = np.maximum(right - np.einsum("srv,sv->sr", matrix, y), 0.05)
    dual = np.where(binding > 0.0, scale[:, None] / np.maximum(room, 0.1), 0.0)
    transposed = np.ascontiguousarray(matrix.transpose(0, 2, 1))
    ridge = 1e-13 * np.eye(cost.shape[1])
    for _ in range(ITERATIONS):
        off_dual = cost + np.einsum("svw,sw->sv", hessian, y) + np.einsum("svr,sr->sv", transposed, dual)
        off_room = np.einsum("srv,sv->sr", matrix, y) + room - right
        gap = (dual * room).sum(axis=1) / number
        if max(float(np.max(gap / scale)), float(np.max(np.abs(off_dual) / scale[:, None]))) < 1e-10:
            break
        ratio = dual / room
        normal = hessian + transposed * ratio[:, None, :] @ matrix
        normal += ridge * (1.0 + np.abs(normal).max(axis=(1, 2)))[:, None, None]

        def direction(
            complement: FloatArray,
            normal: FloatArray = normal,
            ratio: FloatArray = ratio,
            off_room: FloatArray = off_room,
            off_dual: FloatArray = off_dual,
            room: FloatArray = room,
        ) -> tuple[FloatArray, FloatArray, FloatArray]:
            """Newton step towards dual·room = dual·room - complement."""
            inner = ratio * off_room - complement / room
            dy = np.linalg.solve(
                normal, -(off_dual + np.einsum("svr,sr->sv", transposed, inner))[:, :, None]
            )[:, :, 0]
            droom = -off_room - np.einsum("srv,sv->sr", matrix, dy)
            return dy, droom, -complement / room - ratio * droom

        _, droom, ddual = direction(dual * room)
        ahead = ((dual + _reach(dual, ddual) * ddual) * (room + _reach(room, droom) * droom)).sum(
            axis=1
        ) / number
        centre = np.minimum((np.maximum(ahead, 0.0) / np.maximum(gap, 1e-300)) ** 3, 1.0) * gap
        dy, droom, ddual = direction(dual * room + ddual * droom - centre[:, None] * binding)
        step = 0.995 * np.minimum(_reach(room, droom), _reach(dual, ddual))
        y = y + step * dy
        room = np.maximum(room + step * droom, 1e-14)
        dual = np.where(binding > 0.0, np.maximum(dual + step * ddual, 1e-14 * scale[:, None]), 0.0)
    return y, dual


def _reach(value: FloatArray, change: FloatArray) -> FloatArray:
    """Largest step in (0, 1] that keeps every entry of a row from falling below 0. (S, rows) -> (S, 1)."""
    falling = change < 0.0
    limit = np.where(falling, value / np.where(falling, -change, 1.0), np.inf)
    out: FloatArray = np.minimum(1.0, limit.min(axis=1, keepdims=True))
    return out
