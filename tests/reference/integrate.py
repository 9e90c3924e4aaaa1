"""An independent simulator of a porter circuit, to judge the package's engine by.

Two roads, sharing only the node equations of `tests.reference.network`:

- `run_exact`: inside a mode the matrix exponential of the augmented matrix, built by Taylor series
  and repeated squaring in 80-digit decimals (so 0.1 ohm on 100 nF beside a 10 s memory keeps full
  accuracy), then used in doubles over a binary ladder of steps.  Crossings are looked for on a
  grid that is dense in the logarithm of time, dips between grid points are followed down, and the
  first crossing is cut down to a step of ``end / 2**52``.
- `run_ode`: scipy's adaptive integrators on the node equations, where the conducting set is found
  anew at every evaluation, with crossings located by ``brentq`` on the dense output.

Both decide as the timer does: reset beats trigger beats threshold.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from decimal import Decimal, localcontext
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import solve_ivp
from scipy.linalg import expm
from scipy.optimize import brentq

from tests.reference.network import DIGITS, Equations, Mode, Net, zeros

Floats = NDArray[np.float64]
Schedule = Sequence[tuple[float, tuple[str, ...]]]
BITS = 52  # whole doubles
RULES = (("reset", 0), ("trigger", 1), ("threshold", 0))  # order of the timer's tests


class Restless(Exception):  # noqa: N818 - it names what the circuit is
    """The output never comes to rest at one instant, or flips more often than the run allows."""


@dataclass
class Run:
    """What happened. `closest` is the least distance from a tie that decided something (1 = far)."""

    edges: list[tuple[float, int]] = field(default_factory=list)
    volts: Floats = field(default_factory=lambda: np.zeros((0, 0)))
    closest: float = 1.0
    glitches: int = 0

    def near(self, distance: float) -> None:
        """Note a situation that would have gone the other way at *distance* (relative)."""
        self.closest = min(self.closest, abs(distance))


def decide(asserted: dict[str, bool], q: int) -> int:
    """Return the latch after the timer's tests, in their order."""
    for pin, level in RULES:
        if asserted.get(pin, False):
            return level
    return q


def exponential(rate: Any, step: Decimal) -> Any:
    """Return ``exp([[A, b], [0, 0]] step)`` in decimals, for a *step* short against every rate."""
    n = rate.shape[1]
    small = np.concatenate([rate * step, zeros(1, n)])
    total, term = zeros(n, n), zeros(n, n)
    for k in range(n):
        total[k, k] = term[k, k] = Decimal(1)
    for k in range(1, 60):
        term = term @ small / k
        total = total + term
        if max(abs(v) for v in term.flat) < Decimal(10) ** -(DIGITS - 10):
            return total
    raise ValueError("the step is too long for the series")


class Ladder:
    """The exact flow of one mode, for any whole number of *step* seconds."""

    def __init__(self, mode: Mode, step: float) -> None:
        with localcontext() as context:
            context.prec = DIGITS
            power = exponential(mode.rate, Decimal(step))
            rungs = [power]
            for _ in range(BITS):
                power = power @ power
                # Gone modes leave numbers that only cost time.
                power = np.where(np.abs(power) < Decimal(10) ** -60, Decimal(0), power)
                rungs.append(power)
        self.rungs = [np.array(r, dtype=np.float64) for r in rungs]

    def after(self, x: Floats, ticks: NDArray[np.int64]) -> Floats:
        """Return the states, shape (len(ticks), m + 1), that *x* = (a, 1) flows into."""
        states = np.repeat(x[None, :], len(ticks), axis=0)
        for k, rung in enumerate(self.rungs):
            bit = (ticks >> k) & 1 == 1
            if bit.any():
                states[bit] = states[bit] @ rung.T
        return states


def first_crossing(
    rows: Floats, flow: Callable[[NDArray[np.int64]], Floats], last: int
) -> tuple[int, int, list[float]] | None:
    """Return (tick, row, dips) of the first tick at which a row that was not negative is negative.

    *rows* (r, m + 1) are to stay positive. `dips` are the least values met on the way, per row.
    """
    grid = np.unique(
        np.concatenate([np.geomspace(1, last, 8 * BITS), np.linspace(0, last, 129)]).astype(np.int64)
    )
    grid = grid[(grid >= 0) & (grid <= last)]
    values = flow(grid) @ rows.T
    best: tuple[int, int] | None = None
    dips = [1.0] * len(rows)
    for r, column in enumerate(values.T):
        found = _first_negative(column, grid, r, rows, flow, dips)
        if found is not None and (best is None or found < best[0]):
            best = (found, r)
    return None if best is None else (best[0], best[1], dips)


def _first_negative(
    column: Floats,
    grid: NDArray[np.int64],
    r: int,
    rows: Floats,
    flow: Callable[[NDArray[np.int64]], Floats],
    dips: list[float],
) -> int | None:
    inner, before, behind = column[1:-1], column[:-2], column[2:]
    # Rounding makes shallow dips on a level stretch; they matter only close to the level.
    real = (np.minimum(before, behind) - inner > 1e-13) | (inner < 1e-6)
    dip = np.flatnonzero((inner < before) & (inner <= behind) & (inner > 0) & real) + 1
    negative = np.flatnonzero(column[1:] < 0) + 1
    end = negative[0] if len(negative) else len(grid)
    for k in dip[dip < end]:
        tick, value = _bottom(int(grid[k - 1]), int(grid[k + 1]), rows[r], flow)
        dips[r] = min(dips[r], abs(value))
        if value < 0:
            return _cut(int(grid[k - 1]), tick, rows[r], flow)
    return _cut(int(grid[end - 1]), int(grid[end]), rows[r], flow) if len(negative) else None


def _bottom(lo: int, hi: int, row: Floats, flow: Callable[[NDArray[np.int64]], Floats]) -> tuple[int, float]:
    while True:
        ticks = np.unique(np.linspace(lo, hi, 33).astype(np.int64))
        values = flow(ticks) @ row
        k = int(np.argmin(values))
        if values[k] < 0 or len(ticks) < 33 or hi - lo < 1e-7 * hi:
            return int(ticks[k]), float(values[k])
        lo, hi = int(ticks[max(k - 1, 0)]), int(ticks[min(k + 1, len(ticks) - 1)])


def _cut(lo: int, hi: int, row: Floats, flow: Callable[[NDArray[np.int64]], Floats]) -> int:
    """Return the first tick in (lo, hi] at which the row is negative; it is at *hi*."""
    while hi - lo > 1:
        ticks = np.unique(np.linspace(lo, hi, 65).astype(np.int64))
        negative = np.flatnonzero(flow(ticks[1:]) @ row < 0)
        if not len(negative):
            return hi  # within rounding of the level
        k = int(negative[0]) + 1
        lo, hi = int(ticks[k - 1]), int(ticks[k])
    return hi


class _Exact:
    """One exact run; see `run_exact`."""

    def __init__(self, net: Net, end_s: float, most_edges: int) -> None:
        self.eq = Equations(net)
        self.step = end_s / 2.0**BITS
        self.supply = net.supply
        self.most_edges = most_edges
        self.out = Run()
        self.ladders: dict[int, Ladder] = {}
        self.flags: dict[str, bool] = {}
        self.fired: set[str] = set()

    def ladder(self, mode: Mode) -> Ladder:
        if id(mode) not in self.ladders:
            self.ladders[id(mode)] = Ladder(mode, self.step)
        return self.ladders[id(mode)]

    def assert_pins(self, mode: Mode, x: Floats) -> None:
        """Set the flags from the present voltages; for a pin exactly at its level, from where it is going."""
        for pin, decimals in mode.margins.items():
            row = np.array(decimals, dtype=np.float64)
            value = float(row @ x) / self.supply
            if abs(value) > 1e-12 or not self.eq.states:
                self.flags[pin] = value > 0
            else:
                slope = float(row[:-1] @ self._rate(mode, x))
                self.flags[pin] = slope > 0 if slope else self.flags.get(pin, False)
            if pin not in self.fired:
                self.out.near(value)

    def settle(self, x: Floats, q: int, held: frozenset[str], now: float) -> tuple[int, Mode]:
        """Let the timer decide at one instant until nothing changes."""
        start = q
        for _ in range(6):
            mode = self.eq.at(x[:-1], q, held)
            self.assert_pins(mode, x)
            new = decide(self.flags, q)
            if new == q:
                if q != start:
                    self.note(now, q)
                return q, mode
            self.out.glitches += new == start
            q = new
        raise Restless(f"at {now} s")

    def note(self, now: float, q: int) -> None:
        self.out.edges.append((now, q))
        if len(self.out.edges) > self.most_edges:
            raise Restless("too many edges")

    def segment(
        self, x: Floats, q: int, held: frozenset[str], t0: float, t1: float, times: Floats, names: list[int]
    ) -> tuple[Floats, int]:
        """Run from *t0* to *t1* with *held* fixed; fill the voltages at *times* in (t0, t1]."""
        q, mode = self.settle(x, q, held, t0)
        now = t0
        for _ in range(4 * self.most_edges):
            last = round((t1 - now) / self.step)
            if last <= 0:
                return x, q
            event = self._event(mode, x, last) if self.eq.states else None
            tick = event[0] if event else last
            until = now + tick * self.step if event else t1
            self._sample(mode, x, now, until, times, names, closed=event is None)
            if event is None:
                x = self._flow(mode, x, last)
                return x, q
            x, q, mode, now = self._act(mode, x, q, held, event, now, until, t1)
        raise Restless("too many events")

    def _flow(self, mode: Mode, x: Floats, ticks: int) -> Floats:
        return self.ladder(mode).after(x, np.array([ticks]))[0] if self.eq.states else x

    def _event(self, mode: Mode, x: Floats, last: int) -> tuple[int, str | None] | None:
        rows, names = [], []
        for pin, row in mode.margins.items():
            sign = 1.0 if self.flags[pin] else -1.0
            rows.append(sign * np.array(row, dtype=np.float64))
            names.append(pin)
        for guard in mode.guards:
            rows.append(np.array(guard, dtype=np.float64))
            names.append(None)
        if not rows:
            return None
        ladder = self.ladder(mode)
        stacked = np.array(rows) / self.supply
        # A deadband above the rounding noise, so that a level just crossed isn't crossed again.
        stacked[:, -1] += 1e-14
        found = first_crossing(stacked, lambda ticks: ladder.after(x, ticks), last)
        if found is None:
            return None
        tick, row, dips = found
        for name, value in zip(names, dips, strict=True):
            if name is not None:
                self.out.near(value)
        # How steep the crossing is, in supplies per its own time: flat crossings are ill-posed.
        slope = float(stacked[row][:-1] @ self._rate(mode, ladder.after(x, np.array([tick]))[0]))
        if names[row] is not None:
            self.out.near(1e-3 * slope * tick * self.step)
        return tick, names[row]

    def _rate(self, mode: Mode, x: Floats) -> Floats:
        return np.array(mode.rate, dtype=np.float64) @ x

    def _act(
        self,
        mode: Mode,
        x: Floats,
        q: int,
        held: frozenset[str],
        event: tuple[int, str | None],
        now: float,
        at: float,
        end: float,
    ) -> tuple[Floats, int, Mode, float]:
        tick, pin = event
        x = self._flow(mode, x, tick)
        self.fired = set()
        if pin is not None:
            self.out.near((at - now) / at)
            self.out.near((end - at) / end)
            self.flags[pin] = not self.flags[pin]
            self.fired = {pin}
        q, mode = self.settle(x, q, held, at)
        self.fired = set()
        return x, q, mode, at

    def _sample(
        self,
        mode: Mode,
        x: Floats,
        now: float,
        until: float,
        times: Floats,
        names: list[int],
        *,
        closed: bool,
    ) -> None:
        chosen = np.flatnonzero((times > now) & ((times <= until) if closed else (times < until)))
        if not len(chosen):
            return
        rows = np.array(mode.volts, dtype=np.float64)[names]
        ticks = np.round((times[chosen] - now) / self.step).astype(np.int64)
        states = self.ladder(mode).after(x, ticks) if self.eq.states else np.repeat(x[None], len(ticks), 0)
        self.out.volts[:, chosen] = rows @ states.T


def run_exact(
    net: Net,
    schedule: Schedule,
    end_s: float,
    *,
    start: str = "settled",
    output: str = "low",
    nodes: tuple[str, ...] = (),
    times: Sequence[float] = (),
    most_edges: int = 200,
) -> Run:
    """Run *net* through *schedule*; the arguments mean what they mean to ``porter.simulate``.

    The first edge is the output once the timer has decided at time 0.  A voltage asked for at an
    instant of change is the one just before it (avoid asking).

    Raises:
        Restless: the output does not come to rest, or has more than *most_edges* edges.
    """
    self = _Exact(net, end_s, most_edges)
    q = int(output == "high")
    x = _start(self.eq, start, q)
    wanted = np.array(times, dtype=np.float64)
    self.out.volts = np.full((len(nodes), len(wanted)), np.nan)
    names = [self.eq.index[n] for n in nodes]
    bounds = [t for t, _ in schedule[1:]] + [end_s]
    for (t0, held), t1 in zip(schedule, bounds, strict=True):
        x, q = self.segment(x, q, frozenset(held), t0, t1, wanted, names)
    return _tidy(self.out, int(output == "high"))


def _start(eq: Equations, start: str, q: int) -> Floats:
    state = eq.empty if start == "empty" else eq.rest(q, frozenset())
    return np.array([*state, 1.0], dtype=np.float64)


def _tidy(run: Run, before: int) -> Run:
    """Put the output right after time 0 first."""
    first = [level for t, level in run.edges if t == 0.0]
    later = [edge for edge in run.edges if edge[0] > 0.0]
    run.edges = [(0.0, first[-1] if first else before), *later]
    return run


# The road through scipy's integrators


class _Smooth:
    """Node equations in doubles, the conducting set found anew at every state."""

    def __init__(self, eq: Equations, q: int, held: frozenset[str]) -> None:
        ways = len(eq.branches(q))
        options = [eq.mode(q, held, tuple(bool(k >> i & 1) for i in range(ways))) for k in range(2**ways)]
        self.rates = [np.array(m.rate, dtype=np.float64) for m in options]
        self.guards = [np.array(m.guards, dtype=np.float64) for m in options]
        self.volts = [np.array(m.volts, dtype=np.float64) for m in options]
        self.margins = [{k: np.array(v, dtype=np.float64) for k, v in m.margins.items()} for m in options]

    def which(self, x: Floats) -> int:
        return int(np.argmax([min(g @ x, default=0.0) for g in self.guards]))

    def slope(self, _t: float, a: Floats) -> Floats:
        x = np.append(a, 1.0)
        return np.asarray(self.rates[self.which(x)] @ x)

    def margin(self, pin: str, a: Floats) -> float:
        x = np.append(a, 1.0)
        return float(self.margins[self.which(x)][pin] @ x)

    def going(self, pin: str, a: Floats) -> float:
        """Rate of change of the pin's margin, V/s."""
        x = np.append(a, 1.0)
        k = self.which(x)
        return float(self.margins[k][pin][:-1] @ (self.rates[k] @ x))


def run_ode(
    net: Net,
    schedule: Schedule,
    end_s: float,
    *,
    start: str = "settled",
    output: str = "low",
    nodes: tuple[str, ...] = (),
    times: Sequence[float] = (),
    method: str = "DOP853",
) -> Run:
    """The same as `run_exact` by adaptive integration (rtol 1e-11); for circuits that are not stiff.

    Use ``method="Radau"`` for moderately stiff ones.
    """
    eq = Equations(net)
    q = int(output == "high")
    a = _start(eq, start, q)[:-1]
    wanted = np.array(times, dtype=np.float64)
    out = Run(volts=np.full((len(nodes), len(wanted)), np.nan))
    names = [eq.index[n] for n in nodes]
    bounds = [t for t, _ in schedule[1:]] + [end_s]
    flags: dict[str, bool] = {}
    for (t0, held), t1 in zip(schedule, bounds, strict=True):
        now = t0
        while True:
            q, smooth = _settle_ode(eq, a, q, frozenset(held), flags, now, out)
            until, a, pin = _advance(
                smooth, a, now, t1, flags, net.supply, method, (wanted, names, out.volts)
            )
            if pin is None:
                break
            flags[pin] = not flags[pin]
            now = until
    return _tidy(out, int(output == "high"))


def _settle_ode(
    eq: Equations, a: Floats, q: int, held: frozenset[str], flags: dict[str, bool], now: float, out: Run
) -> tuple[int, _Smooth]:
    for _ in range(6):
        smooth = _Smooth(eq, q, held)
        for pin in smooth.margins[0]:
            value = smooth.margin(pin, a) / eq.net.supply
            ahead = smooth.going(pin, a)
            flags[pin] = value > 0 if abs(value) > 1e-9 or not ahead else ahead > 0
        new = decide(flags, q)
        if new == q:
            return q, smooth
        q = new
        out.edges.append((now, q))
    raise Restless(f"at {now} s")


def _advance(
    smooth: _Smooth,
    a: Floats,
    now: float,
    end: float,
    flags: dict[str, bool],
    supply: float,
    method: str,
    sink: tuple[Floats, list[int], Floats],
) -> tuple[float, Floats, str | None]:
    """Integrate to the first crossing of a pin's level, or to *end*; fill the voltages on the way."""
    solution = solve_ivp(
        smooth.slope, (now, end), a, method=method, rtol=1e-11, atol=1e-12 * supply, dense_output=True
    )
    flow = solution.sol
    best: tuple[float, str | None] = (end, None)
    for pin, flag in flags.items():
        sign = 1.0 if flag else -1.0
        fine = np.unique(
            np.concatenate([np.linspace(u, v, 9) for u, v in zip(solution.t, solution.t[1:], strict=False)])
        )
        values = np.array([sign * smooth.margin(pin, flow(t)) for t in fine])
        below = np.flatnonzero((values[1:] < 0) & (values[:-1] >= 0)) + 1
        if len(below):
            k = below[0]
            t = brentq(
                lambda s, p=pin: smooth.margin(p, flow(s)), fine[k - 1], fine[k], xtol=1e-15, rtol=1e-14
            )
            if t < best[0]:
                best = (float(t), pin)
    wanted, names, volts = sink
    until, pin = best
    for k in np.flatnonzero((wanted > now) & (wanted <= until)):
        x = np.append(flow(wanted[k]), 1.0)
        volts[:, k] = smooth.volts[smooth.which(x)][names] @ x
    return until, flow(until), pin


def flow_expm(net: Net, q: int, held: frozenset[str], state: Floats, seconds: float) -> Floats:
    """Return the state after *seconds* in the one mode that holds at *state*, by ``scipy.linalg.expm``.

    No branch or comparator may change on the way.
    """
    mode = Equations(net).at(state, q, held)
    rate = np.array(mode.rate, dtype=np.float64)
    full = np.vstack([rate, np.zeros(rate.shape[1])])
    return np.asarray(expm(full * seconds) @ np.append(state, 1.0))[:-1]
