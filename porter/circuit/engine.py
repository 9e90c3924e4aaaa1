"""The circuit in motion: many units at once, exactly, from event to event.

A *lane* is one run: a unit (a row of values), its latch, held mask, conducting
set and capacitor states.  All lanes advance together; lanes in the same mode
share one solution of it.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from porter.circuit.flow import first_fall, reach
from porter.circuit.network import Mode, Topology, solve_mode, topology
from porter.circuit.values import Columns, Floats, columns
from porter.spec.model import Circuit

Ints = NDArray[np.int64]
Mask = NDArray[np.bool_]
TRIGGER, THRESHOLD, RESET = 0, 1, 2
#: Flips within one stretch of constant buttons after which a lane is said to oscillate.
BUSY = 16
_FOR_EVER = 1e8  # s, three years
_EVENTS = 100_000  # a backstop: a run of constant buttons has far fewer events
_ROUNDS = 64  # looks at one instant before it is said never to come to rest


@dataclass(slots=True)
class Lanes:
    """The state of a batch of runs; arrays are changed in place by `Engine` alone.

    Args:
        unit: row of values, shape (B,); q, held, conducts: shape (B,).
        x: capacitor states, volt, shape (B, m).
        flips: flips since the held mask last changed, shape (B,).
        busy: True where the lane oscillates (it is left where it was found out).
        period_s: time between the last two flips to the same level, nan until there are some.
    """

    unit: Ints
    q: Ints
    held: Ints
    conducts: Ints
    x: Floats
    flips: Ints
    busy: Mask
    period_s: Floats
    last_s: Floats  # (B, 2): time of the last flip to low and to high, since the clock's start
    clock_s: Floats  # (B,)
    crossed: Ints  # guard whose crossing was just met, -1 = none: it counts as being on its level

    def __len__(self) -> int:
        return len(self.q)

    def take(self, rows: NDArray[np.integer] | Mask) -> "Lanes":
        """Return a copy of some lanes."""
        return Lanes(*(getattr(self, name)[rows].copy() for name in self.__slots__))

    def put(self, rows: NDArray[np.integer] | Mask, other: "Lanes") -> None:
        """Write lanes back."""
        for name in self.__slots__:
            getattr(self, name)[rows] = getattr(other, name)

    def copy(self) -> "Lanes":
        """Return a copy of all lanes."""
        return self.take(np.arange(len(self)))


#: Called with (lanes' rows, mode, z0, start times, durations) for every stretch of one mode.
Watcher = Callable[[Ints, Mode, Floats, Floats, Floats], None]
#: Called with (lanes' rows, times, new latch) for every flip.
Listener = Callable[[Ints, Floats, Ints], None]


class Engine:
    """Exact simulation of a circuit for a table of units.

    Args:
        circuit: as read.
        rows: values of the units, shape (U, P); None = the nominal unit.
    """

    def __init__(self, circuit: Circuit, rows: Floats | None = None, cols: Columns | None = None) -> None:
        self.circuit = circuit
        self.columns = cols or columns(circuit)
        self.rows = self.columns.nominal[None, :] if rows is None else rows
        self.topo: Topology = topology(circuit, self.columns)
        self.supply = self.topo.supply(self.rows)
        self._modes: dict[tuple[int, int, int], Mode] = {}
        self.tolerance = 1e-12 * float(np.max(self.supply))
        self._way_tolerance = self.tolerance * self._slope_shares()

    def mode(self, q: int, held: int, conducts: int) -> Mode:
        """Return a mode solved for all units."""
        key = (int(q), int(held), int(conducts))
        if key not in self._modes:
            self._modes[key] = solve_mode(self.topo, self.rows, *key)
        return self._modes[key]

    @property
    def modes(self) -> tuple[Mode, ...]:
        """The modes met so far."""
        return tuple(self._modes.values())

    def _slope_shares(self) -> Floats:
        """How fine each one-way branch must be judged, in tolerances, shape (ways,).

        A milliohm hides nanoamperes behind a picovolt, so a steep branch is judged more finely, as far
        as rounding allows.
        """
        shares = np.ones(self.topo.ways)
        for branch in self.topo.branches:
            if branch.way >= 0:
                ohm = float(branch.ohm(self.rows).min())
                shares[branch.way] = min(shares[branch.way], max(ohm, 0.005))
        return shares

    # --- starting points ---

    def lanes(self, unit: Ints, q: Ints | int, x: Floats, held: Ints | int = 0) -> Lanes:
        """Return lanes at given states, before any decision is made."""
        count = len(unit)
        return Lanes(
            unit=np.asarray(unit, np.int64),
            q=np.broadcast_to(np.asarray(q, np.int64), count).copy(),
            held=np.broadcast_to(np.asarray(held, np.int64), count).copy(),
            conducts=np.zeros(count, np.int64),
            x=np.array(x, float),
            flips=np.zeros(count, np.int64),
            busy=np.zeros(count, bool),
            period_s=np.full(count, np.nan),
            last_s=np.full((count, 2), np.nan),
            clock_s=np.zeros(count),
            crossed=np.full(count, -1, np.int64),
        )

    def empty(self, q: int, unit: Ints | None = None, held: int = 0) -> Lanes:
        """Return lanes the instant after the supply stepped up over empty capacitors."""
        unit = np.arange(len(self.rows)) if unit is None else unit
        m = self.topo.states
        x = np.zeros((len(self.rows), m))
        if m:
            charge = self.topo.cap_to_supply(self.rows) * self.supply[:, None]
            x = np.asarray(np.linalg.solve(self.topo.cap_matrix(self.rows), charge[..., None])[..., 0], float)
        return self.lanes(unit, q, x[unit], held)

    def rest(self, q: int, unit: Ints | None = None) -> tuple[Lanes, Mask]:
        """Return lanes settled with no button held and the latch at *q*, and where that holds.

        The mask is False where the latch does not stay (a one-shot's high, an oscillator).
        """
        lanes = self.empty(q, unit)
        self.run(lanes, np.inf, frozen=True)
        self.resolve(lanes)
        self.run(lanes, np.inf)
        return lanes, (lanes.q == q) & ~lanes.busy

    # --- moving ---

    def press(self, lanes: Lanes, held: NDArray[np.integer] | int, listener: Listener | None = None) -> None:
        """Change the held masks and let the latch decide at that instant."""
        lanes.held[:] = held
        lanes.flips[:] = 0
        lanes.busy[:] = False
        self.resolve(lanes, listener=listener)

    def run(
        self,
        lanes: Lanes,
        duration: Floats | float,
        *,
        frozen: bool = False,
        one_flip: bool = False,
        watcher: Watcher | None = None,
        listener: Listener | None = None,
    ) -> None:
        """Advance every lane by its duration (inf: until nothing will happen any more).

        Args:
            duration: seconds, scalar or shape (B,).
            frozen: let no comparator act; one-way branches still switch.
            one_flip: leave a lane where it is right after its first flip.
            watcher, listener: told of every stretch and every flip.
        """
        left = np.broadcast_to(np.asarray(duration, float), len(lanes)).copy()
        before = lanes.q.copy()
        self.resolve(lanes, frozen=frozen, listener=listener)
        todo = np.flatnonzero(~lanes.busy & ((lanes.q == before) | (not one_flip)))
        for _ in range(_EVENTS):
            if not len(todo):
                return
            done = [
                self._leg(lanes, rows, mode, left, frozen, watcher)
                for mode, rows in self._by_mode(lanes, todo)
            ]
            moved = np.sort(np.concatenate(done))
            if not len(moved):
                return
            part = lanes.take(moved)
            self.resolve(part, frozen=frozen, listener=_offset(listener, moved))
            go_on = ~part.busy & (left[moved] > 0)
            if one_flip:
                go_on &= part.q == lanes.q[moved]
            lanes.put(moved, part)
            todo = moved[go_on]
        raise RuntimeError("the circuit's events do not come to an end; this is a fault in porter")

    def _by_mode(self, lanes: Lanes, rows: Ints) -> list[tuple[Mode, Ints]]:
        held, q, conducts = lanes.held[rows], lanes.q[rows], lanes.conducts[rows]
        key = (held << self.topo.ways | conducts) << 1 | q
        out = []
        for k in np.unique(key):
            mode = self.mode(k & 1, k >> 1 >> self.topo.ways, k >> 1 & (1 << self.topo.ways) - 1)
            out.append((mode, rows[key == k]))
        return out

    def _leg(
        self, lanes: Lanes, rows: Ints, mode: Mode, left: Floats, frozen: bool, watcher: Watcher | None
    ) -> Ints:
        """Move lanes of one mode to their next event or end; return those that met an event."""
        unit = lanes.unit[rows]
        z0 = _times(mode.Sinv[unit], lanes.x[rows])
        rate, pull = mode.rate[unit], mode.drive[unit] - mode.rate[unit] * z0
        when, guard = self._next(mode, lanes.crossed[rows], unit, z0, pull, rate, left[rows], frozen)
        hit = np.isfinite(when)
        t = np.where(hit, when, left[rows])
        if watcher is not None:
            watcher(rows, mode, z0, lanes.clock_s[rows].copy(), t)
        z = z0 + pull * self._span(rate, t)
        lanes.x[rows] = _times(mode.S[unit], z)
        lanes.clock_s[rows] += np.where(np.isfinite(t), t, 0.0)  # "for ever" has no date
        left[rows[hit]] -= when[hit]
        left[rows[~hit]] = 0.0
        lanes.crossed[rows] = np.where(hit, guard, -1)
        way = guard[hit] - 3
        lanes.conducts[rows[hit]] ^= np.where(way >= 0, 1 << np.maximum(way, 0), 0)
        return rows[hit]

    def _span(self, rate: Floats, t: Floats) -> Floats:
        """As `reach`, but a charge that drifts for ever is left where it is."""
        span = reach(rate, t[:, None])
        return np.where(np.isfinite(span), span, 0.0)

    def _next(
        self,
        mode: Mode,
        crossed: Ints,
        unit: Ints,
        z0: Floats,
        pull: Floats,
        rate: Floats,
        until: Floats,
        frozen: bool,
    ) -> tuple[Floats, Ints]:
        """Return when the first guard of each lane falls (inf where none does in time), and which."""
        f0 = mode.g0[unit] + (mode.Gz[unit] @ z0[..., None])[..., 0]
        d = mode.Gz[unit] * pull[:, None, :]
        near = self._near(f0[:, :3], crossed)
        f0[:, :3], d[:, :3] = _signed(f0[:, :3], d[:, :3], near)
        # A branch whose current only fades to nothing doesn't switch: it has to be seen past zero.
        f0[:, 3:] = np.maximum(f0[:, 3:], 0.0) + self._way_tolerance
        first = 3 if frozen else 0
        rows, guards = f0.shape[0], f0.shape[1] - first
        if guards == 0:
            return np.full(rows, np.inf), np.full(rows, -1, np.int64)
        times = first_fall(
            f0[:, first:].ravel(),
            d[:, first:].reshape(rows * guards, -1),
            np.repeat(rate, guards, axis=0),
            np.repeat(until, guards),
        )
        times = times.reshape(rows, guards)
        # Later than any product lives, only the rounding of a drift is left to cross anything.
        times = np.where(times > _FOR_EVER, np.inf, times)
        which = times.argmin(axis=1)
        return times[np.arange(rows), which], which.astype(np.int64) + first

    def _near(self, f: Floats, crossed: Ints) -> Mask:
        """Return which deciding voltages count as being on their level, shape (B, 3).

        The one whose crossing was just located does even where rounding leaves it beside.
        """
        just = (np.arange(3) == crossed[:, None]) & (np.abs(f) <= 1e6 * self.tolerance)
        return np.asarray(just | (np.abs(f) <= self.tolerance))

    # --- deciding ---

    def resolve(self, lanes: Lanes, *, frozen: bool = False, listener: Listener | None = None) -> None:
        """Find the conducting sets and the latch at this instant.

        One-way branches: the least violated index is switched until none is (K. G. Murty's
        least-index principal pivoting; it ends because the network matrix is a P-matrix).
        """
        todo = np.arange(len(lanes))
        for _ in range(_ROUNDS * (1 + self.topo.ways)):
            changed = [
                self._settle_instant(lanes, rows, mode, frozen, listener)
                for mode, rows in self._by_mode(lanes, todo)
            ]
            todo = np.sort(np.concatenate(changed)) if changed else todo[:0]
            todo = todo[~lanes.busy[todo]]
            if not len(todo):
                return
        lanes.busy[todo] = True
        lanes.period_s[todo] = 0.0

    def _settle_instant(
        self, lanes: Lanes, rows: Ints, mode: Mode, frozen: bool, listener: Listener | None
    ) -> Ints:
        unit = lanes.unit[rows]
        z = _times(mode.Sinv[unit], lanes.x[rows])
        f = mode.g0[unit] + (mode.Gz[unit] @ z[..., None])[..., 0]
        slope = (mode.Gz[unit] @ (mode.drive[unit] - mode.rate[unit] * z)[..., None])[..., 0]
        just = np.arange(self.topo.ways) + 3 == lanes.crossed[rows, None]
        bad = f[:, 3:] < np.where(just, -1e6, -1.0) * self._way_tolerance
        switch = bad.any(axis=1)
        if switch.any():
            lanes.conducts[rows[switch]] ^= 1 << bad[switch].argmax(axis=1)
        if frozen:
            return rows[switch]
        flip = self._flip(lanes, rows, f[:, :3], slope[:, :3], np.asarray(~switch))
        self._record(lanes, rows[flip], listener)
        return rows[switch | flip]

    def _flip(self, lanes: Lanes, rows: Ints, f: Floats, slope: Floats, sure: Mask) -> Mask:
        trigger, threshold, reset = asserted(f, slope, self._near(f, lanes.crossed[rows]))
        q = lanes.q[rows]
        want = np.where(reset, 0, np.where(trigger, 1, np.where(threshold, 0, q)))
        return np.asarray(sure & (want != q))

    def _record(self, lanes: Lanes, rows: Ints, listener: Listener | None) -> None:
        if not len(rows):
            return
        lanes.q[rows] ^= 1
        lanes.flips[rows] += 1
        now, q = lanes.clock_s[rows], lanes.q[rows]
        lanes.period_s[rows] = now - lanes.last_s[rows, q]
        lanes.last_s[rows, q] = now
        lanes.busy[rows] = lanes.flips[rows] >= BUSY
        if listener is not None:
            listener(rows, now.copy(), q.copy())

    # --- looking ---

    def guards(self, lanes: Lanes) -> Floats:
        """Return the three deciding voltages less their levels (trigger, threshold, reset), shape (B, 3)."""
        out = np.empty((len(lanes), 3))
        for mode, rows in self._by_mode(lanes, np.arange(len(lanes))):
            unit = lanes.unit[rows]
            z = _times(mode.Sinv[unit], lanes.x[rows])
            out[rows] = mode.g0[unit, :3] + (mode.Gz[unit, :3] @ z[..., None])[..., 0]
        return out

    def volts(self, lanes: Lanes) -> Floats:
        """Return all node voltages, shape (B, N)."""
        out = np.empty((len(lanes), len(self.topo.nodes)))
        for mode, rows in self._by_mode(lanes, np.arange(len(lanes))):
            unit = lanes.unit[rows]
            z = _times(mode.Sinv[unit], lanes.x[rows])
            out[rows] = mode.v0[unit] + (mode.Vz[unit] @ z[..., None])[..., 0]
        return out

    def floating(self, lanes: Lanes) -> Mask:
        """Return which nodes float, shape (B, N)."""
        out = np.zeros((len(lanes), len(self.topo.nodes)), bool)
        for mode, rows in self._by_mode(lanes, np.arange(len(lanes))):
            out[rows] = mode.floating
        return out


def asserted(f: Floats, slope: Floats, near: Mask) -> tuple[Mask, Mask, Mask]:
    """Return which comparators are asserted: trigger, threshold, reset, each shape (B,).

    A voltage on its level (`near`) counts as being where it is going.
    """
    side = np.where(near, np.sign(slope), np.sign(f))
    return side[:, TRIGGER] < 0, side[:, THRESHOLD] > 0, side[:, RESET] < 0


def _signed(f: Floats, d: Floats, near: Mask) -> tuple[Floats, Floats]:
    """Turn comparator guards so that each starts at or above zero."""
    side = np.where(near, np.sign(d.sum(axis=2)), np.sign(f))
    side = np.where(side == 0, 1.0, side)
    return np.where(near, 0.0, f * side), d * side[:, :, None]


def _times(matrix: Floats, vector: Floats) -> Floats:
    return np.asarray((matrix @ vector[..., None])[..., 0])


def _offset(listener: Listener | None, rows: Ints) -> Listener | None:
    if listener is None:
        return None
    return lambda part, times, q: listener(rows[part], times, q)
