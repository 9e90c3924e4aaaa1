"""The supply as a function of time, and the circuit on it: exact, stretch by stretch.

While the supply moves linearly, a mode's drive is affine in time.  With the supply as one more
state ``V`` (rate 0, drive = its slope) and each decay measured from where it is heading,
``w = z - k V``, the mode is again one with a constant drive::

    dz/dt = a + b V + c dV/dt - rate z      (c: what capacitors to the supply rail inject)
    dw/dt = a + (c - k) dV/dt - rate w      with k = b / rate

so that `Engine` runs it unchanged and misses no crossing.  (A charge that nothing drains has
``rate = b = 0``; it takes ``k = 0``.)

What is assumed of the chip: it works from the family's least published supply on, at once.  Below
that it is taken as not there: the output and the discharge pin conduct nothing, no comparator
acts, and what the latch held is not kept.  The supply is a source: at 0 V it takes current.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from porter.circuit.engine import Engine, Ints, Lanes, Listener, Mask, Watcher
from porter.circuit.family import FAMILIES
from porter.circuit.network import Mode, Topology, solve_mode, topology
from porter.circuit.values import Columns, Floats, columns
from porter.spec.model import Circuit

#: In place of a latch value: the chip is not working.
_ASLEEP = 2
_BEATS = 256  # times that an oscillator is pushed on within one stretch
_PIECES = 10_000  # a profile with more stretches than this is no power-up


@dataclass(frozen=True, slots=True)
class Profile:
    """The supply over time: straight lines between points ``(second, volt)``, then constant.

    Two points with the same time are a step.

    Raises:
        ValueError: no point, a time before the last one's, or a voltage below zero.
    """

    points: tuple[tuple[float, float], ...]

    def __post_init__(self) -> None:
        times = [t for t, _ in self.points]
        if not times or times[0] != 0 or times != sorted(times) or len(times) > _PIECES:
            raise ValueError("the supply's times must begin at 0 and rise")
        if any(not 0 <= v < np.inf for _, v in self.points) or times[-1] == np.inf:
            raise ValueError("the supply must be at 0 V or above at every time")

    def at(self, times: Floats) -> Floats:
        """Return the voltage at some times, after a step that happens then."""
        when, volts = (np.array(column) for column in zip(*self.points, strict=True))
        k = np.searchsorted(when, times, side="right") - 1
        after = np.minimum(k + 1, len(when) - 1)
        length = when[after] - when[k]
        part = np.where(length > 0, (times - when[k]) / np.where(length > 0, length, 1.0), 0.0)
        return np.asarray(volts[k] + (volts[after] - volts[k]) * part)


def step(volts: float) -> Profile:
    """The supply is there at once."""
    return Profile(((0.0, 0.0), (0.0, volts)))


def ramp(volts: float, seconds: float) -> Profile:
    """The supply rises evenly from 0 V."""
    return Profile(((0.0, 0.0), (seconds, volts)))


def dip(volts: float, low: float, seconds: float) -> Profile:
    """The supply falls at once to *low* (0 V: a dropout) and comes back at once."""
    return Profile(((0.0, volts), (0.0, low), (seconds, low), (seconds, volts)))


def works_from(circuit: Circuit) -> float:
    """Return the supply from which the chip is taken to work, volt: its family's least published one.

    A circuit drawn for less than that is taken to work at its own supply.
    """
    return min(FAMILIES[circuit.timer.family].supply_v[0], circuit.supply.nominal)


@dataclass(frozen=True, slots=True)
class Piece:
    """One straight stretch: the supply at its begin, its slope (V/s), how long (inf: for ever)."""

    volts: float
    slope: float
    seconds: float
    awake: bool


def pieces(profile: Profile, least: float) -> tuple[Piece, ...]:
    """Cut a profile where it bends, and where the chip starts or stops working (*least*, volt)."""
    out: list[Piece] = []
    for (t0, v0), (t1, v1) in pairwise(profile.points):
        if t1 == t0:
            continue
        slope = (v1 - v0) / (t1 - t0)
        cut = (least - v0) / slope if slope else 0.0
        if min(v0, v1) < least < max(v0, v1):
            out.append(Piece(v0, slope, cut, v0 > least))
            out.append(Piece(least, slope, t1 - t0 - cut, v1 > least))
        else:
            out.append(Piece(v0, slope, t1 - t0, min(v0, v1) >= least))
    end = profile.points[-1][1]
    return (*out, Piece(end, 0.0, np.inf, end >= least))


class Powered(Engine):
    """The engine with the supply as the last capacitor state; `slopes` (V/s) may differ from lane to lane.

    Args:
        circuit: as read; only the nominal unit runs.
        lanes: how many, each with its own slope.
    """

    def __init__(self, circuit: Circuit, lanes: int, cols: Columns | None = None) -> None:
        cols = cols or columns(circuit)
        super().__init__(circuit, np.tile(cols.nominal, (lanes, 1)), cols)
        self._row = cols.nominal[None, :]
        volts = float(self.supply[0])
        self._rails = tuple(_with_rail(circuit, cols, v) for v in (0.0, volts))
        self._still: dict[tuple[int, int, int], tuple[Mode, Mode]] = {}
        self.awake = True
        self.slopes = np.zeros(lanes)
        self.jump = self._jump()

    def stretch(self, slopes: Floats, awake: bool) -> None:
        """Let the supply move by *slopes* from now on, with the chip working or not."""
        self.slopes, self.awake = slopes, awake
        self._modes.clear()

    def mode(self, q: int, held: int, conducts: int) -> Mode:
        """Return a mode in the coordinates of the moving supply."""
        key = (int(q), int(held), int(conducts))
        if key not in self._modes:
            self._modes[key] = self._moving(*key)
        return self._modes[key]

    def _moving(self, q: int, held: int, conducts: int) -> Mode:
        key = (q if self.awake else _ASLEEP, held, conducts)
        if key not in self._still:
            off, on = (solve_mode(rail, self._row, *key) for rail in self._rails)
            self._still[key] = off, on
        into = self.topo.cap_to_supply(self._row)
        return _augment(*self._still[key], float(self.supply[0]), into, self.slopes, q)

    def _jump(self) -> Floats:
        """Return by how much each state moves with one volt of a supply step, shape (m,)."""
        m = self.topo.states
        charge = self.topo.cap_to_supply(self._row)[..., None]
        if not m:
            return np.zeros(0)
        return np.asarray(np.linalg.solve(self.topo.cap_matrix(self._row), charge)[0, :, 0], float)

    def set_supply(self, lanes: Lanes, volts: Floats) -> None:
        """Step the supply; capacitors to the rail pass the step on."""
        lanes.x[:, :-1] += self.jump * (volts - lanes.x[:, -1])[:, None]
        lanes.x[:, -1] = volts

    def dark(self, count: int, held: Ints | int = 0) -> Lanes:
        """Return lanes without supply, all capacitors empty."""
        return self.lanes(np.arange(count), 0, np.zeros((count, self.topo.states + 1)), held)

    def settled(self, q: Ints, held: Ints | int = 0) -> tuple[Lanes, Mask]:
        """Return lanes at rest at the full supply with the latch at *q*, and where it stays there."""
        plain = Engine(self.circuit, self._row, self.columns)
        rests = [plain.rest(level) for level in (0, 1)]
        x = np.stack([lanes.x[0] for lanes, _ in rests])
        stays = np.array([ok[0] for _, ok in rests])
        supply = np.full((len(q), 1), self.supply[0])
        return self.lanes(np.arange(len(q)), q, np.concatenate([x[q], supply], 1), held), stays[q]


def _with_rail(circuit: Circuit, cols: Columns, volts: float) -> Topology:
    return topology(circuit, cols, lambda rows: np.full(len(rows), volts))


def _augment(off: Mode, on: Mode, volts: float, into: Floats, slopes: Floats, q: int) -> Mode:
    """Return the mode with the supply as a state, from its solutions at 0 V and at *volts*."""
    count, m = len(slopes), off.rate.shape[1]
    per_volt = (on.drive - off.drive) / volts
    held = off.rate == 0
    k = np.where(held, 0.0, per_volt / np.where(held, 1.0, off.rate))
    along = (np.swapaxes(off.S, 1, 2) @ into[..., None])[..., 0]
    drive = np.concatenate([off.drive + (along - k) * slopes[:, None], slopes[:, None]], 1)
    rate = np.concatenate([off.rate, np.zeros((1, 1))], 1)
    S = _framed(off.S, (off.S @ k[..., None]))
    Sinv = _framed(off.Sinv, -k[..., None])

    def spread(a: Floats) -> Floats:
        return np.broadcast_to(a, (count, *a.shape[1:]))

    def with_supply(per_z: Floats, at_0: Floats, at_v: Floats) -> Floats:
        own = (per_z @ k[..., None])[..., 0] + _difference(at_v, at_0) / volts
        return np.concatenate([per_z, own[..., None]], 2)

    return Mode(
        q=q,
        held=off.held,
        conducts=off.conducts,
        rate=spread(rate),
        drive=drive,
        S=spread(S),
        Sinv=spread(Sinv),
        Vz=spread(with_supply(off.Vz, off.v0, on.v0)),
        v0=spread(off.v0),
        Gz=spread(with_supply(off.Gz, off.g0, on.g0)),
        g0=spread(off.g0),
        floating=off.floating,
        drifts=m > 0 and off.drifts,
    )


def _framed(inner: Floats, column: Floats) -> Floats:
    """Return ``[[inner, column], [0, 1]]``."""
    m = inner.shape[1]
    last = np.concatenate([np.zeros((1, 1, m)), np.ones((1, 1, 1))], 2)
    return np.concatenate([np.concatenate([inner, column], 2), last], 1)


def _difference(a: Floats, b: Floats) -> Floats:
    """Return ``a - b``, 0 where both are the same infinity (a pin that never decides)."""
    same = a == b
    return np.where(same, 0.0, np.where(same, 0.0, a) - np.where(same, 0.0, b))


#: Called with (lanes' rows, their guards before anything acts) where the chip starts to work.
Wake = Callable[[Ints, Floats], None]


def follow(
    engine: Powered,
    lanes: Lanes,
    profiles: Sequence[Profile],
    wakes_as: Ints,
    *,
    end_s: float = np.inf,
    listener: Listener | None = None,
    on_wake: Wake | None = None,
) -> Mask:
    """Run each lane along its own profile, then until nothing more happens (or to *end_s*).

    Args:
        lanes: as `Powered.dark` or `Powered.settled` gives them; changed in place.
        profiles: one a lane.
        wakes_as: the latch that a lane has where its chip starts to work anew, shape (B,).
        listener, on_wake: told of flips, and of chips that start to work.

    Returns:
        Which lanes' chips stopped working at some time, shape (B,).
    """
    least = works_from(engine.circuit)
    cut = [pieces(p, least) for p in profiles]
    asleep = lanes.x[:, -1] < least * (1 - 1e-12)
    slept = asleep.copy()
    for k in range(max(map(len, cut))):
        rows = np.array([i for i in range(len(lanes)) if k < len(cut[i])], np.int64)
        stretch = [cut[i][k] for i in rows]
        for awake in (False, True):
            mine = np.array([p.awake == awake for p in stretch])
            if mine.any():
                part = [p for p, m in zip(stretch, mine, strict=True) if m]
                woken = asleep if awake else np.zeros_like(asleep)
                _stretch(engine, lanes, rows[mine], part, woken, wakes_as, end_s, listener, on_wake)
                asleep[rows[mine]] = not awake
                slept[rows[mine]] |= not awake
    return slept


def _stretch(
    engine: Powered,
    lanes: Lanes,
    rows: Ints,
    part: Sequence[Piece],
    woken: Mask,
    wakes_as: Ints,
    end_s: float,
    listener: Listener | None,
    on_wake: Wake | None,
) -> None:
    """Run some lanes along one piece each, all with the chip working or all without."""
    slopes = np.zeros(len(lanes))
    slopes[rows] = [p.slope for p in part]
    awake = part[0].awake
    engine.stretch(slopes, awake)
    some = lanes.take(rows)
    engine.set_supply(some, np.array([p.volts for p in part]))
    some.crossed[:], some.flips[:], some.busy[:] = -1, 0, False
    new = woken[rows]
    some.q[new] = wakes_as[rows][new]
    if new.any() and on_wake is not None:
        engine.resolve(some, frozen=True)
        on_wake(rows[new], engine.guards(some)[new])
    seconds = np.minimum([p.seconds for p in part], np.maximum(end_s - some.clock_s, 0.0))
    told = None if listener is None else (lambda at, when, q: listener(rows[at], when, q))
    ends = some.clock_s + seconds
    engine.run(some, seconds, frozen=not awake, listener=told)
    beat_on(engine, some, ends, told)
    lanes.put(rows, some)


def beat_on(
    engine: Powered,
    lanes: Lanes,
    ends: Floats,
    listener: Listener | None = None,
    watcher: Watcher | None = None,
) -> None:
    """Let lanes that oscillate go on to the end (time, shape (B,)) of their piece, where it has one."""
    for _ in range(_BEATS):
        rows = np.flatnonzero(lanes.busy & (lanes.period_s > 0) & np.isfinite(ends) & (lanes.clock_s < ends))
        if not len(rows):
            return
        some = lanes.take(rows)
        some.busy[:], some.flips[:] = False, 0
        told = None if listener is None else (lambda at, when, q, rows=rows: listener(rows[at], when, q))
        engine.run(some, ends[rows] - some.clock_s, listener=told, watcher=watcher)
        lanes.put(rows, some)
