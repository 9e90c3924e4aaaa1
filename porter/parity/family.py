"""The port against all allowed units at once: what every unit does, the port must do.

A set of units that stands for the family is run exactly through press sequences
whose presses and gaps sit at the edges of the windows: taps after every history,
rhythms, presses that overlap, and presses and gaps long enough for a counter of 8 or
16 bits to run over.  Per sequence and edge
number there are three bands: every unit has that edge (*always*), none has it
(*never*), or units differ (*either*).  The port must have an *always* edge, of
the same polarity, within the units' own times and the stated delay; it may not
have a *never* edge; in an *either* band it is free.

The comparison of edges by their number is a Skorokhod distance on binary traces
(J. Deshmukh, R. Majumdar, V. Prabhu, CAV 2015): a glitch can't hide between samples.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise, permutations
from typing import Any, Protocol

import numpy as np

from porter.behaviour.model import Behaviour
from porter.circuit.engine import BUSY, Engine, Ints, Lanes, Listener, Mask
from porter.circuit.values import Floats, columns
from porter.parity.model import FamilyCheck
from porter.port.model import Port, State
from porter.port.step import start
from porter.port.swift import stepper
from porter.spec.model import Circuit

MOST_EDGES = 24  # edges of a trace that are compared
_LENGTHS = 9  # different lengths of presses and gaps
_HAND_S = 0.04  # a quick press of a person (common practice)
_LOOK = 16  # ticks between looks at whether anything still moves


class Machine(Protocol):
    """Anything that answers held masks tick by tick; states are whatever it likes."""

    @property
    def tick_s(self) -> float:
        """Length of a tick, seconds."""

    @property
    def held_count(self) -> int:
        """Number of held masks."""

    def begin(self, lanes: int) -> Any:
        """Return the power-on state of some lanes."""

    def step(self, state: Any, held: Ints) -> tuple[Any, Ints]:
        """Advance by a tick; returns the state and the latch of each lane."""


class PortMachine:
    """A port as a machine."""

    def __init__(self, port: Port) -> None:
        self.port, self.start_q = port, port.start_q
        self._step = stepper(port)

    @property
    def tick_s(self) -> float:
        """Length of a tick, seconds."""
        return self.port.tick_s

    @property
    def held_count(self) -> int:
        """Number of held masks."""
        return self.port.held_count

    def begin(self, lanes: int) -> Any:
        """Return the power-on state of some lanes."""
        return start(self.port, lanes)

    def step(self, state: Any, held: Ints) -> tuple[Any, Ints]:
        """Advance by a tick."""
        after, _ = self._step(state, held)
        return after, after.q.astype(np.int64)


#: A press sequence: (held mask, ticks) one after the other.
Row = tuple[tuple[int, int], ...]


#: Press sequences: held masks and lengths in nominal ticks, both of shape (S, segments); length 0 = unused.
@dataclass(frozen=True, slots=True)
class Presses:
    """A batch of press sequences."""

    masks: Ints
    ticks: Ints

    def __len__(self) -> int:
        return len(self.masks)


@dataclass(frozen=True, slots=True)
class Stage:
    """What the units of a family do in a batch of press sequences; machines are held against it.

    Args:
        clocks: lengths of the machine's real tick, in nominal ticks.
        first, last, share: per sequence and edge, the earliest and the latest unit's time and the
            share of units that have it, shape (S, MOST_EDGES).
        delay: ticks that a machine may be late with each edge: two, and one more for each edge up to
            it that the nominal unit has between button changes, where a machine acts up to a tick late.
        clear: False from the first edge on that units differ in having, or that a button change may
            overtake: edges no longer line up by number there.
    """

    presses: Presses
    clocks: tuple[float, ...]
    first: Floats
    last: Floats
    share: Floats
    delay: Floats
    clear: Mask

    @staticmethod
    def set(
        circuit: Circuit,
        rows: Floats,
        presses: Presses,
        clocks: tuple[float, ...],
        tick_s: float,
        start_q: int,
    ) -> "Stage":
        """Run units, the nominal one first, through sequences of ticks of this length, starting with this latch."""
        times = circuit_edges(circuit, rows, presses, tick_s, start_q)
        first, last, share = _bands(times)
        nominal, ends = times[0][:, :, None], np.cumsum(presses.ticks, axis=1)[:, None, :] * tick_s
        alone = np.isfinite(times[0]) & (times[0] > 0) & (np.abs(nominal - ends) > 1e-9).all(axis=2)
        delay = 2.0 + np.cumsum(alone, axis=1)
        with np.errstate(invalid="ignore"):
            room = np.where(ends > nominal, ends - nominal, np.inf).min(axis=2)
        overtaken = alone & (room < delay * tick_s)
        mixed = (share > 0) & (share < 1)
        clear = np.cumsum(mixed | overtaken, axis=1) == 0
        return Stage(presses, clocks, first, last, share, delay, clear)

    def parted(self, machine: Machine) -> Floats:
        """Return when each sequence shows the machine to be no allowed unit, seconds, inf = never; shape (clocks, S)."""
        runs = machine_edges(machine, self.presses, np.array(self.clocks))
        ticks = [machine.tick_s * clock for clock in self.clocks]
        return np.array(
            [
                _parts(edges, self, tick, np.asarray(self.delay * tick + 1e-12), machine.tick_s)
                for tick, edges in zip(ticks, runs, strict=True)
            ]
        )

    def witness(self, parted: Floats, tick_s: float) -> tuple[int, ...] | None:
        """Write out a short sequence that parts, held mask by tick; one of the nominal clock where there is one."""
        nominal = parted[self.clocks.index(1.0)]
        return _witness(self.presses, nominal if np.isfinite(nominal).any() else parted.min(axis=0), tick_s)


def check_family(
    circuit: Circuit,
    behaviour: Behaviour,
    machine: Machine,
    *,
    start_q: int,
    count: int = 240,
    seed: int = 7,
    stages: tuple[Stage, ...] | None = None,
) -> FamilyCheck:
    """Run units and machine through press sequences and compare their edges.

    Args:
        machine: the port, or anything that claims to be one.
        start_q: the latch that units start with where nothing forces it.
        count: sequences, beside the ones that always belong; seed: of the ones that are drawn.
        stages: what `set_stages` returned for this circuit, tick and number of buttons.
    """
    if stages is None:
        stages = set_stages(circuit, behaviour, machine, start_q=start_q, count=count, seed=seed)
    parted = [stage.parted(machine) for stage in stages]
    wrong = sum(int(np.isfinite(when).any(axis=0).sum()) for when in parted)
    found = [stage.witness(when, machine.tick_s) for stage, when in zip(stages, parted, strict=True)]
    witness = min((w for w in found if w is not None), key=len, default=None)
    rows, many = len(units(circuit, behaviour)), sum(len(stage.presses) for stage in stages)
    always = sum(int((s.share == 1.0).sum()) for s in stages)
    either = sum(int(((s.share > 0) & (s.share < 1)).sum()) for s in stages)
    clocks = stages[0].clocks
    said = (
        f"{many:,} press sequences were run through {rows} units that span the family and through the port with its "
        f"clock at {', '.join(f'{c:.3g}' for c in clocks)} of nominal: {always:,} edges that every unit has, {either:,} that some have; "
        + (f"the port left these bands in {wrong} sequences" if wrong else "the port kept within them")
    )
    return FamilyCheck(many, rows, clocks, always, either, wrong, witness, said)


def set_stages(
    circuit: Circuit, behaviour: Behaviour, machine: Machine, *, start_q: int, count: int = 240, seed: int = 7
) -> tuple[Stage, ...]:
    """Run the units through all sequences; the stages serve every machine of the same tick and buttons."""
    rows, long = units(circuit, behaviour), lengths(behaviour, machine)
    batches = (
        (sequences(behaviour, machine, count, seed), clock_ends(circuit)),
        # Too long to run with every clock: a counter runs over at the same tick with all of them.
        (laid_out(list(_overflows(long, behaviour, machine)), int(long[-1])), (1.0,)),
    )
    return tuple(
        Stage.set(circuit, rows, presses, clocks, machine.tick_s, start_q) for presses, clocks in batches
    )


def clock_ends(circuit: Circuit) -> tuple[float, ...]:
    """Return the lengths of a real tick to run a port with, in nominal ticks."""
    return tuple(sorted({1 - circuit.port.clock, 1.0, 1 + circuit.port.clock}))


def units(circuit: Circuit, behaviour: Behaviour) -> Floats:
    """Return the units that stand for the family: the nominal one first, then those at the ends of windows and margins."""
    nominal = columns(circuit).nominal[None, :]
    rows = behaviour.extra.get("units")
    if rows is None:
        return nominal
    others = np.asarray(rows)
    return np.concatenate([nominal, others[(others != nominal).any(axis=1)]])


# --- sequences ---


def lengths(behaviour: Behaviour, machine: Machine) -> Ints:
    """Return lengths in ticks worth trying: two ticks, a quick hand, and both sides of every window.

    A press of less than two ticks may fall between two samples of a slow clock: that deafness is
    the ledger's row *shortest-press*, and is not looked for again here.
    """
    tick = machine.tick_s
    found = {2, max(2, round(_HAND_S / tick))}
    longest = 4 * _HAND_S
    for window in behaviour.windows:
        band = window.guaranteed
        for value, factor in ((band.least, 0.9), (band.nominal, 0.6), (band.most, 1.12)):
            if value:
                found.add(max(2, int(value * factor / tick)))
                longest = max(longest, value)
    for timed in behaviour.timed:
        for value, factor in ((timed.guaranteed.least, 0.6), (timed.guaranteed.most, 1.12)):
            if value:
                found.add(max(2, int(value * factor / tick)))
                longest = max(longest, value)
    found |= {max(2, round(2.5 * longest / tick)), max(2, round(_slow(behaviour) / tick))}
    ordered = sorted(found)
    while len(ordered) > _LENGTHS:
        ratios = [b / a for a, b in pairwise(ordered)]
        del ordered[1 + int(np.argmin(ratios[:-1]))]
    return np.array(ordered, np.int64)


def _slow(behaviour: Behaviour) -> float:
    value = behaviour.extra.get("slowest_s", 0.0)
    return 1.5 * float(value) if isinstance(value, float) else 0.0


def sequences(behaviour: Behaviour, machine: Machine, count: int, seed: int) -> Presses:
    """Return press sequences: every press-gap-press of the lengths as far as they go, drawn ones, and attacks."""
    long = lengths(behaviour, machine)
    rng = np.random.default_rng(seed)
    rows = list(_short_ones(long, machine.held_count))
    rng.shuffle(rows)
    rows = rows[: count // 2]
    while len(rows) < count:
        rows.append(_drawn(long, machine.held_count, rng))
    rows += [*_rhythms(long, machine), *_overlaps(long, machine)]
    return laid_out(rows, int(long[-1]))


def laid_out(rows: Sequence[Sequence[tuple[int, int]]], rest: int) -> Presses:
    """Lay sequences of (mask, ticks) out as arrays, each followed by *rest* open ticks so that late edges are seen."""
    width = max(len(r) for r in rows) + 1
    masks, ticks = np.zeros((len(rows), width), np.int64), np.zeros((len(rows), width), np.int64)
    for i, row in enumerate(rows):
        ends = [*row, (0, rest)]
        masks[i, : len(ends)] = [m for m, _ in ends]
        ticks[i, : len(ends)] = [t for _, t in ends]
    return Presses(masks, ticks)


def _singles(machine: Machine) -> list[int]:
    return [1 << i for i in range((machine.held_count - 1).bit_length())]


def _rhythms(long: Ints, machine: Machine) -> "Iterator[Row]":
    """Taps again and again, from power-on and after a first turn: what every closure does to the memory."""
    rest, hand = int(long[-1]), max(2, round(_HAND_S / machine.tick_s))
    for mask in _singles(machine):
        for lead in ((), ((mask, 2), (0, rest))):
            for tap in sorted({2, hand}):
                for gap in sorted({18, *long[:-1].tolist()}):
                    yield (*lead, *((mask, tap), (0, gap)) * 5)


def _overlaps(long: Ints, machine: Machine) -> "Iterator[Row]":
    """One button over another, let go in either order."""
    some = sorted({2, int(long[len(long) // 2]), int(long[-1])})
    for one, other in permutations(_singles(machine), 2):
        for both in some:
            yield ((one, some[1]), (one | other, both), (other, some[1]))
            yield ((one, some[1]), (one | other, both), (one, some[1]))


def _overflows(long: Ints, behaviour: Behaviour, machine: Machine) -> "Iterator[Row]":
    """Presses and gaps just longer than 256 and 65,536 ticks, where a counter too narrow starts again."""
    rest, hand = int(long[-1]), max(2, round(_HAND_S / machine.tick_s))
    taps = [
        w.guaranteed.least for w in behaviour.windows if w.window == "re-arm-after-tap" and w.guaranteed.least
    ]
    past = max(2, round(0.4 * min(taps, default=0.0) / machine.tick_s))
    for mask in _singles(machine):
        for lead in ((), ((mask, 2), (0, rest))):
            for full in (1 << 8, 1 << 16):
                yield (*lead, (mask, 2), (0, full + past), (mask, hand))
                yield (*lead, (mask, full + past), (0, rest), (mask, hand))


def _short_ones(long: Ints, masks: int) -> "Iterator[Row]":
    rest = (0, int(long[-1]))
    for mask in range(1, masks):
        for d in long.tolist():
            yield ((mask, d),)
            for g in long.tolist():
                yield (rest, (mask, d), (0, g), (mask, int(long[-1])))
                other = (mask * 5 + 1) % (masks - 1) + 1 if masks > 2 else mask
                yield ((mask, d), (0, g), (mask, d), (0, g), (other, d))


def _drawn(long: Ints, masks: int, rng: np.random.Generator) -> "Row":
    count = int(rng.integers(2, 7))
    out: list[tuple[int, int]] = []
    for _ in range(count):
        before = out[-1][0] if out else -1
        mask = int(rng.integers(0, masks))
        if mask == before:
            mask = (mask + 1) % masks
        out.append((mask, int(long[rng.integers(0, len(long))])))
    return tuple(out)


# --- traces ---


def circuit_edges(circuit: Circuit, rows: Floats, presses: Presses, tick_s: float, start_q: int) -> Floats:
    """Run every unit through every sequence; returns edge times, shape (units, sequences, MOST_EDGES), inf = none."""
    engine = Engine(circuit, rows)
    count, many = len(rows), len(presses)
    lanes = engine.empty(start_q, np.repeat(np.arange(count), many))
    engine.resolve(lanes)
    times = np.full((count * many, MOST_EDGES), np.inf)
    used = np.zeros(count * many, np.int64)
    begin = lanes.q.copy()

    def listen(at: Ints, when: Floats, _: Ints) -> None:
        room = used[at] < MOST_EDGES
        times[at[room], used[at[room]]] = when[room]
        used[at] += 1

    for k in range(presses.masks.shape[1]):
        engine.press(lanes, np.tile(presses.masks[:, k], count), listen)
        _run(engine, lanes, np.tile(presses.ticks[:, k] * tick_s, count), listen)
        lanes.busy[:] = False
    return _from(start_q, begin, times).reshape(count, many, MOST_EDGES)


def _run(engine: Engine, lanes: Lanes, seconds: Floats, listen: Listener) -> None:
    """Run through oscillation too, as far as edges are compared."""
    end = lanes.clock_s + seconds
    engine.run(lanes, seconds, listener=listen)
    for _ in range(1 + MOST_EDGES // BUSY):
        on = lanes.busy & (lanes.period_s > 0)
        if not on.any():
            return
        lanes.busy[on], lanes.flips[on] = False, 0
        engine.run(lanes, np.where(on, end - lanes.clock_s, 0.0), listener=listen)


def _from(start_q: int, begin: Ints, times: Floats) -> Floats:
    """Count a latch that is already the other way as an edge at the start, so that polarities line up."""
    moved = begin != start_q
    out = times.copy()
    out[moved, 1:] = times[moved, :-1]
    out[moved, 0] = 0.0
    return out


def machine_edges(machine: Machine, presses: Presses, clocks: Floats) -> Floats:
    """Run a machine through every sequence with every clock, all beside each other.

    Args:
        clocks: shape (C,), how long a real tick is in nominal ticks.

    Returns:
        Edge times in real seconds, shape (C, sequences, MOST_EDGES), inf = none.
    """
    many, count = len(presses), len(clocks) * len(presses)
    ends = np.tile(np.cumsum(presses.ticks, axis=1), (len(clocks), 1))
    masks, clock = np.tile(presses.masks, (len(clocks), 1)), np.repeat(clocks, many)
    state = machine.begin(count)
    times = np.full((count, MOST_EDGES), np.inf)
    used = np.zeros(count, np.int64)
    rows = np.arange(count)
    last = np.full(count, _first(machine))
    segment = np.zeros(count, np.int64)
    tick, over = 0, int(np.ceil(ends[:, -1].max() / clocks.min()))
    while tick < over:
        now = tick * clock
        while True:  # segments of length 0 are stepped over
            done = (ends[rows, segment] <= now + 1e-9) & (segment < ends.shape[1] - 1)
            if not done.any():
                break
            segment += done
        before = state
        state, q = machine.step(state, masks[rows, segment])
        turned = np.flatnonzero((q != last) & (used < MOST_EDGES) & (now <= ends[:, -1]))
        times[turned, used[turned]] = now[turned] * machine.tick_s
        used[turned] += 1
        last = q
        tick += 1
        if tick % _LOOK == 0 and (_rests(before, state, count) | (used >= MOST_EDGES)).all():
            # Nothing moves: on to where a button does.
            ahead = np.ceil((ends[rows, segment] - 1e-9) / clock).astype(np.int64)
            tick = max(tick, int(np.where(ahead >= tick, ahead, over).min()))
    return times.reshape(len(clocks), many, MOST_EDGES)


def _rests(before: Any, after: Any, count: int) -> Mask:
    """Return which lanes' state is the same after a step, all False for states of unknown kinds."""
    if isinstance(after, State):
        return np.asarray((before.q == after.q) & (before.regs == after.regs).all(axis=1))
    if isinstance(after, np.ndarray):
        return np.asarray((before == after).reshape(count, -1).all(axis=1))
    if isinstance(after, tuple):
        return np.asarray(np.all([_rests(a, b, count) for a, b in zip(before, after, strict=True)], axis=0))
    return np.zeros(count, bool)


def _first(machine: Machine) -> int:
    """The level that a machine shows before its first tick; low where it doesn't say."""
    return int(getattr(machine, "start_q", 0))


def _bands(times: Floats) -> tuple[Floats, Floats, Floats]:
    """Return for each sequence and edge number: earliest and latest unit, and the share of units that have it."""
    have = np.isfinite(times)
    share = have.mean(axis=0)
    first = times.min(axis=0)
    last = np.where(have, times, -np.inf).max(axis=0)
    return first, last, share


def _parts(edges: Floats, stage: Stage, early: float, late: Floats, tick_s: float) -> Floats:
    """Return when each sequence shows a machine to do what no allowed unit does, seconds, inf = never."""
    first, last, share = stage.first, stage.last, stage.share
    has = np.isfinite(edges)
    end = stage.presses.ticks.sum(axis=1)[:, None] * tick_s
    with np.errstate(invalid="ignore"):
        too_early = has & (share > 0) & (edges < first - early)
        too_late = (share > 0) & (edges > last + late) & (has | (share == 1.0)) & (last + late < end)
    extra = has & (share == 0.0)
    when = np.where(too_early | extra, edges, np.where(too_late, last + late, np.inf))
    return np.asarray(np.where(stage.clear, when, np.inf).min(axis=1))


def _witness(presses: Presses, parted: Floats, tick_s: float) -> tuple[int, ...] | None:
    """Write out the sequence with the fewest changes until it shows the fault, held mask by tick up to there."""
    at = np.flatnonzero(np.isfinite(parted))
    if not len(at):
        return None
    ticks = np.floor(parted[at] / tick_s + 1e-9).astype(np.int64) + 1
    begun = (np.cumsum(presses.ticks[at], axis=1) < ticks[:, None]).sum(axis=1)
    best = int(np.lexsort((ticks, begun))[0])
    return tuple(np.repeat(presses.masks[at[best]], presses.ticks[at[best]]).tolist()[: ticks[best]])
