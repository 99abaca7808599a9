"""The warm-up curve: how bias and temperatures move from cold to rest, or away.

Strategy
--------
The heat nodes of `benchkit.stage.heat` are stepped with the circuit always at its operating point (nothing electrical
is as slow as a junction). With x the nodes and F(x) = dx/dt, each step is that of an exponential Rosenbrock method of
third order with an embedded second-order one (Hochbruck, Ostermann and Schweitzer, SIAM Journal on Numerical Analysis
47, 2009: exprb32):

    U = x + h phi1(hJ) F(x);    x' = U + 2 h phi3(hJ) (F(U) - F(x) - J (U - x)),

J the exact derivative dF/dx from the circuit's first-order response. Junctions that follow in a second and a sink that
takes many minutes are both linear in it, so that a step is as long as the *bending* of the curve allows, and a whole
warm-up takes some dozens of solves. The difference of both orders sets the step. All units step together.

A unit has arrived when what is left to its state of rest is below `ARRIVED_K`. It has run away when a junction has
passed what it is rated for while deviations grow by themselves and the sink gets hotter, or when its circuit has no
solution any more. A unit that is still on its way at the end has done neither.
Inside a step the nodes follow the step's own equation, which costs no solve, and the drop follows them by its slopes at
both ends; between the moments so known the curve is a cubic.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from benchkit.quantities import show
from benchkit.stage.balance import HOTTEST_C
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import Array, Parameters, nominal
from benchkit.stage.electrothermal import Electrothermal, Point
from benchkit.stage.loop_gain import rates
from benchkit.stage.operate import solve_units
from benchkit.stage.points import transistors_of
from benchkit.stage.runs import Mask
from benchkit.stage.warming import hottest_allowed_c

STEP_ERROR_K: Final = 2e-2
"""Error that one step may make in any node; for hot ones 1e-4 of their rise on top."""
RELATIVE_ERROR: Final = 1e-4
ARRIVED_K: Final = 5e-3
SETTLED_SHARE: Final = 0.01
"""A drop within this share of its final value counts as settled."""
FIRST_STEP_S: Final = 0.05
LEAST_STEP_S: Final = 1e-4
MOST_STEPS: Final = 400
LAGS_TO_WAIT: Final = 15.0
"""So many of the slowest time constants a warm-up is followed at most, over what its loop gain leaves of one."""
_FINE = 8
_BETWEEN = (0.1, 0.25, 0.5, 0.75)
"""Shares of a step at which the curve is known too."""

Matrix = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True)
class WarmUp:
    """Warm-up curves of units from cold, the trimmer left alone.

    Attributes
    ----------
    design : Design
    condition : Condition
    travel : array or None
        The trimmer's travel of each unit.
    times_s : array of shape (steps,)
    drop_v, drop_slope : array of shape (units, steps)
        Emitter drop of pair 1 (mean of both halves) and its rate (V/s); not a number once a unit has run away.
    celsius : array of shape (names, units, steps)
        Junctions and, last, the heat sink.
    names : tuple of str
        Rows of `celsius`.
    rest_s : array of shape (units,)
        When each unit arrived at rest; not a number for one that did not.
    runs_away_s : array of shape (units,)
        When a junction of a unit that runs away passes what it is rated for; not a number for one that doesn't.
    """

    design: Design
    condition: Condition
    travel: Array | None
    times_s: Array
    drop_v: Array
    drop_slope: Array
    celsius: Array
    names: tuple[str, ...]
    rest_s: Array
    runs_away_s: Array

    @property
    def units(self) -> int:
        """Number of units."""
        return len(self.drop_v)

    @property
    def cold_v(self) -> Array:
        """Drop at the moment of power-on, shape (units,)."""
        return self.drop_v[:, 0]

    @property
    def final_v(self) -> Array:
        """Drop at rest, shape (units,); not a number for units that don't arrive."""
        return np.where(np.isfinite(self.rest_s), self.drop_v[:, -1], np.nan)

    def drop_at(self, times_s: Array) -> Array:
        """Drop (V) of every unit at some times, shape (units, times); at rest beyond the end."""
        return self._cubic(np.clip(np.asarray(times_s, np.float64), 0.0, self.times_s[-1]))

    def peak(self, unit: int = 0) -> tuple[float, float]:
        """Return when a unit's drop is highest (s), and that drop (V)."""
        times_s = self._fine_times()
        drops = self.drop_at(times_s)[unit]
        top = int(np.nanargmax(drops))
        around = np.linspace(times_s[max(top - 1, 0)], times_s[min(top + 1, len(times_s) - 1)], 200)
        close = self.drop_at(around)[unit]
        best = int(np.nanargmax(close))
        return float(around[best]), float(close[best])

    def settled_s(self, unit: int = 0, share: float = SETTLED_SHARE) -> float:
        """Return from when on (s) a drop stays within a share of its final value; not a number if it never does."""
        final_v = float(self.final_v[unit])
        if not np.isfinite(final_v):
            return float("nan")
        times_s = self._fine_times()
        away = np.abs(self.drop_at(times_s)[unit] - final_v) - share * abs(final_v)
        outside = np.flatnonzero(away > 0.0)
        if not len(outside):
            return 0.0
        last = int(outside[-1])
        if last + 1 >= len(times_s):
            return float(times_s[-1])
        part = away[last] / (away[last] - away[last + 1])
        return float(times_s[last] + part * (times_s[last + 1] - times_s[last]))

    def told(self, unit: int = 0) -> str:
        """Say in a sentence how a unit warms up."""
        cold_v = show(float(self.cold_v[unit]), "V")
        if np.isfinite(self.runs_away_s[unit]):
            return (
                f"From {cold_v} cold it runs away: a junction passes its rating after {_time(self.runs_away_s[unit])}."
            )
        peak_s, peak_v = self.peak(unit)
        final_v = float(self.final_v[unit])
        if not np.isfinite(final_v):
            here_v = show(float(self.drop_v[unit, -1]), "V")
            return f"From {cold_v} cold it is at {here_v} after {_time(float(self.times_s[-1]))}, and not yet at rest."
        text = f"From {cold_v} cold"
        if peak_v > max(final_v, float(self.cold_v[unit])) * (1.0 + SETTLED_SHARE):
            text += f" up to {show(peak_v, 'V')} after {_time(peak_s)}, then"
        text += f" to {show(final_v, 'V')} at rest"
        settled_s = self.settled_s(unit)
        return f"{text}; within 1 % of it {'at once' if settled_s <= 0.0 else 'from ' + _time(settled_s) + ' on'}."

    def _fine_times(self) -> Array:
        inner = np.linspace(0.0, 1.0, _FINE, endpoint=False)
        steps = np.diff(self.times_s)
        return np.append((self.times_s[:-1, None] + steps[:, None] * inner).ravel(), self.times_s[-1])

    def _cubic(self, times_s: Array) -> Array:
        left = np.clip(np.searchsorted(self.times_s, times_s, side="right") - 1, 0, len(self.times_s) - 2)
        step = self.times_s[left + 1] - self.times_s[left]
        step[step <= 0.0] = 1.0  # a stage that is at rest from the start has one moment only
        u = (times_s - self.times_s[left]) / step
        slopes = [self.drop_slope[:, k] * step for k in (left, left + 1)]
        return _hermite(u, self.drop_v[:, left], self.drop_v[:, left + 1], *slopes)


def _time(seconds: float) -> str:
    if seconds < 120.0:
        return f"{seconds:.0f} s"
    return f"{seconds / 60.0:.1f} min" if seconds < 600.0 else f"{seconds / 60.0:.0f} min"


def warm_up(
    design: Design,
    condition: Condition,
    parameters: Parameters | None = None,
    *,
    travel: Array | float | None = None,
    until_s: float | None = None,
    step_error_k: float = STEP_ERROR_K,
    from_c: Array | None = None,
) -> WarmUp:
    """Follow units from cold, or from given temperatures, to rest.

    Parameters
    ----------
    design : Design
    condition : Condition
        Its rails are there from the first moment; its trimmer says where the trimmers stand ("target": where each unit
        meets the target, cold or warm as the design's target says).
    parameters : mapping, optional
        The units; the nominal one if left out.
    travel : array or float, optional
        The trimmer's travel of each unit, instead of the condition's.
    until_s : float, optional
        Where to end (s), instead of when everything is at rest.
    step_error_k : float
        Error (K) that one step may make.
    from_c : array of shape (names, units), optional
        Temperatures to start from (degC), such as a column of another curve's `celsius`, instead of the ambient one.

    Returns
    -------
    WarmUp
    """
    parameters = nominal(design) if parameters is None else parameters
    trimmed = replace(condition, when=design.target.when if condition.trimmer == "target" else "cold")
    solved = solve_units(design, parameters, trimmed, position=travel, loading="none")
    stage = Electrothermal(design, parameters, condition, solved.position, units=solved.units)
    rise_k = None if from_c is None else np.asarray(np.linalg.solve(stage.nodes.shows, from_c - stage.ambient_c).T)
    return _Walk(design, condition, stage, step_error_k).to_rest(solved.position, until_s, rise_k)


@dataclass(frozen=True)
class _Moment:
    """Nodes (K) and their rates (K/s), the drop (V) and its slopes by the junctions (V/K) at a time (s)."""

    seconds: float
    x: Array
    rate: Array
    drop_v: Array
    by_kelvin: Matrix


@dataclass(frozen=True)
class _Flow:
    """One step: x' = rate + matrix (x - begin) + bend (t/seconds)^2."""

    seconds: float
    begin: Array
    end: Array
    rate: Array
    matrix: Matrix
    bend: Array


class _Walk:
    """One integration; the nodes are of shape (units, nodes)."""

    def __init__(self, design: Design, condition: Condition, stage: Electrothermal, step_error_k: float) -> None:
        self.design, self.condition, self.stage, self.nodes = design, condition, stage, stage.nodes
        self.error_k = step_error_k
        units = stage.units
        self.rest_s, self.runs_away_s = np.full(units, np.nan), np.full(units, np.nan)
        self.gone = np.zeros(units, np.bool_)
        self.allowed_c = np.array([hottest_allowed_c(design, p.name, p.role) for p in transistors_of(design)])
        self.passed_s = np.full(units, np.nan)

    def to_rest(self, travel: Array | None, until_s: float | None, rise_k: Array | None = None) -> WarmUp:
        units, count = self.stage.units, len(self.nodes.names)
        x, now_s, step_s = np.zeros((units, count)) if rise_k is None else rise_k, 0.0, FIRST_STEP_S
        end_s = LAGS_TO_WAIT * float(self.nodes.lag_s.max()) * 4.0 if until_s is None else until_s
        point = self.stage.at(self._celsius(x))
        kept: list[_Moment] = []
        flow: _Flow | None = None
        for _ in range(MOST_STEPS):
            slopes = self.stage.slopes(point)
            rate = self._rate(x, point)
            matrix = rates(self.nodes, slopes.powers)
            drop_v = np.where(point.converged & ~self.gone, self.stage.drop_v(point.solution), np.nan)
            moment = _Moment(now_s, x, rate, drop_v, slopes.drop)
            if flow is not None:
                kept += [self._between(kept[-1], moment, flow, share) for share in _BETWEEN]
            kept.append(moment)
            self._note(now_s, x, point, rate, matrix)
            moving = ~self.gone & ~np.isfinite(self.rest_s)
            if now_s >= end_s or (until_s is None and not moving.any()):
                break
            live = ~self.gone if until_s is not None else moving
            point, flow, longer = self._step(moment, point, matrix, min(step_s, end_s - now_s), live)
            x, now_s, step_s = flow.end, now_s + flow.seconds, flow.seconds * longer
            if flow.seconds < LEAST_STEP_S:
                self.gone |= moving
        self.runs_away_s = np.where(self.gone, np.fmin(self.passed_s, now_s), np.nan)
        shows = self.nodes.shows[:-1].T
        times_s = np.array([moment.seconds for moment in kept])
        drop_slope = np.stack([np.einsum("up,up->u", m.by_kelvin, m.rate @ shows) for m in kept], axis=-1)
        if until_s is None:  # who has arrived is left where it is
            drop_slope = np.where(times_s >= self.rest_s[:, None], 0.0, drop_slope)
        return WarmUp(
            design=self.design, condition=self.condition, travel=travel, times_s=times_s,
            drop_v=np.stack([moment.drop_v for moment in kept], axis=-1),
            drop_slope=drop_slope,
            celsius=np.stack([self._celsius(moment.x) for moment in kept], axis=-1),
            names=self.nodes.names, rest_s=self.rest_s, runs_away_s=self.runs_away_s,
        )  # fmt: skip

    def _between(self, before: _Moment, after: _Moment, flow: _Flow, share: float) -> _Moment:
        """A moment inside a step: the nodes by the step's own equation, the drop along the way by its slopes."""
        span = share * flow.seconds
        low, correction = _phis(flow.matrix, flow.rate, span)
        x = flow.begin + low + share**2 * np.einsum("uij,uj->ui", correction, flow.bend)
        rate = flow.rate + np.einsum("uij,uj->ui", flow.matrix, x - flow.begin) + share**2 * flow.bend
        shows = self.nodes.shows[:-1].T
        way, whole = (x - before.x) @ shows, (after.x - before.x) @ shows
        u = np.einsum("up,up->u", way, whole) / np.maximum(np.einsum("up,up->u", whole, whole), 1e-30)
        aside = way - u[:, None] * whole
        by_kelvin = before.by_kelvin + u[:, None] * (after.by_kelvin - before.by_kelvin)
        rise = [np.einsum("up,up->u", slope, whole) for slope in (before.by_kelvin, after.by_kelvin)]
        drop_v = _hermite(u, before.drop_v, after.drop_v, *rise) + np.einsum("up,up->u", by_kelvin, aside)
        return _Moment(before.seconds + span, x, rate, drop_v, by_kelvin)

    def _celsius(self, x: Array) -> Array:
        return np.asarray(self.stage.ambient_c + self.nodes.shows @ x.T)

    def _rate(self, x: Array, point: Point) -> Array:
        return np.asarray((self.nodes.goals(x.T, point.powers_w) - x.T).T / self.nodes.lag_s)

    def _note(self, now_s: float, x: Array, point: Point, rate: Array, matrix: Matrix) -> None:
        """Write down who has arrived and who has run away."""
        celsius = self._celsius(x)
        over = (celsius[:-1] > self.allowed_c[:, None]).any(axis=0) & ~np.isfinite(self.passed_s)
        self.passed_s[over] = now_s
        self.gone |= ~point.converged | (celsius.max(axis=0) >= HOTTEST_C)
        good = np.flatnonzero(np.isfinite(matrix).all(axis=(1, 2)) & ~self.gone & ~np.isfinite(self.rest_s))
        if not len(good):
            return
        left = np.linalg.solve(matrix[good], -rate[good][:, :, None])[:, :, 0]
        stable = np.linalg.eigvals(matrix[good]).real.max(axis=1) < 0.0
        self.gone[good] |= ~stable & np.isfinite(self.passed_s[good]) & (rate[good, -1] > 0.0)
        near = (np.abs(left).max(axis=1) < ARRIVED_K) & stable
        self.rest_s[good[near]] = now_s

    def _step(
        self, moment: _Moment, point: Point, matrix: Matrix, step_s: float, live: Mask
    ) -> tuple[Point, _Flow, float]:
        """Make one step that is good enough; return where it ends, the step, and how much longer the next may be."""
        start = point.solution
        usable = live & np.isfinite(matrix).all(axis=(1, 2)) & point.converged
        safe = np.where(usable[:, None, None], matrix, 0.0)
        push = np.where(usable[:, None], moment.rate, 0.0)
        while True:
            low, correction = _phis(safe, push, step_s)
            middle = moment.x + low
            there = self.stage.at(self._celsius(middle), start)
            bend = self._rate(middle, there) - push - np.einsum("uij,uj->ui", safe, low)
            bend = np.where((usable & there.converged)[:, None], bend, 0.0)
            extra = np.einsum("uij,uj->ui", correction, bend)
            error = float((np.abs(extra) / (self.error_k + RELATIVE_ERROR * np.abs(middle))).max(initial=0.0))
            lost = bool((usable & ~there.converged).any())
            if (error <= 1.0 and not lost) or step_s < LEAST_STEP_S:
                break
            step_s *= 0.3 if lost else max(0.2, 0.85 * error ** (-1.0 / 3.0))
        end = np.minimum(middle + extra, 2.0 * HOTTEST_C)
        flow = _Flow(step_s, moment.x, end, push, safe, bend)
        longer = min(4.0, 0.85 * max(error, 1e-3) ** (-1.0 / 3.0))
        return self.stage.at(self._celsius(end), there.solution), flow, longer


def _hermite(u: Array, a: Array, b: Array, slope_a: Array, slope_b: Array) -> Array:
    """Cubic over 0..1 with the values a, b and the slopes at its ends."""
    return np.asarray(
        a * (1 + 2 * u) * (1 - u) ** 2 + b * u**2 * (3 - 2 * u) + slope_a * u * (1 - u) ** 2 - slope_b * u**2 * (1 - u)
    )


def _phis(matrix: Matrix, push: Array, step_s: float) -> tuple[Array, Matrix]:
    """Step*phi1(step*J)*push, and 2*step*phi3(step*J), by scaling and squaring of one larger exponential.

    exp of [[hJ, 1, 0, 0], [0, 0, 1, 0], [0, 0, 0, 1], [0, 0, 0, 0]] (blocks) has phi1, phi2 and phi3 in its first row
    (Sidje; Al-Mohy and Higham).
    """
    units, count = push.shape
    size = 4 * count
    block = np.zeros((units, size, size))
    block[:, :count, :count] = step_s * matrix
    for k in range(3):
        block[:, k * count : (k + 1) * count, (k + 1) * count : (k + 2) * count] = np.eye(count)
    norm = float(np.abs(block).sum(axis=2).max(initial=0.0))
    halvings = max(0, int(np.ceil(np.log2(max(norm, 1e-300)))) + 3)
    block = block * 0.5**halvings
    term = result = np.broadcast_to(np.eye(size), block.shape)
    for k in range(1, 11):
        term = term @ block / k
        result = result + term
    for _ in range(halvings):
        result = result @ result
    phi1, phi3 = result[:, :count, count : 2 * count], result[:, :count, 3 * count :]
    return step_s * np.einsum("uij,uj->ui", phi1, push), np.asarray(2.0 * step_s * phi3)
