"""The closure for several capacitors: every state of the whole box, by cells that are cut where it matters.

Error: every passive mode shrinks the energy ``e' C e`` of the copies' error (C the
capacitance matrix), so with at most q added each tick, the norm stays below
``q / (1 - lambda)``, lambda the largest factor of any mode.

Decisions: the circuit's guards and the port's tests are affine.  Where all corners
of a cell agree on the sign of each of them, the whole cell decides alike.  Cells
that don't agree, or decide otherwise than the port, are halved in every direction
until they are smaller than the bound; what is left then is grey.  A corner whose
decision is the same for every error within the bound, and not the port's, is wrong.
"""

from dataclasses import dataclass
from itertools import product

import numpy as np

from porter.circuit.engine import Ints, Mask
from porter.circuit.network import Mode
from porter.circuit.values import Floats
from porter.parity.closure import Walk
from porter.parity.model import Closure
from porter.parity.twin import circuit_decides, port_decides
from porter.port.charge import one_tick
from porter.port.memory import Memory, settled_mode
from porter.port.model import U16, Charge, ChargeMode, Move, Port, State, Test
from porter.port.step import move_copies

_FIRST = 4096  # side of the first cells, copies
_MOST_CELLS = 3_000_000


def walk_many(mem: Memory, port: Port, clock: float = 1.0) -> Walk:
    """Close a charge port of several capacitors over the whole box of states.

    Args:
        clock: how long a tick of the port's real clock is, in nominal ticks.
    """
    machine = port.machine
    assert isinstance(machine, Charge)
    energy = Energy(mem)
    pairs = [(q, h) for q in (0, 1) for h in range(port.held_count)]
    ticks = {key: _Tick(mem, machine, *key, port.tick_s * clock) for key in pairs}
    sizes = [energy.size(t.off[None, :])[0] for t in ticks.values()]
    factors = [energy.factor(t.keep) for t in ticks.values()]
    still = [s for s, f in zip(sizes, factors, strict=True) if f >= 1 - 1e-12]
    moving = [f for f in factors if f < 1 - 1e-12]
    bound = max(sizes) / (1 - max(moving)) if moving else max(sizes)
    bound = max(bound, energy.size(np.full((1, len(mem.kept)), 0.5))[0])  # the start is rounded too
    plain = all(t.one_mode for t in ticks.values())
    harmless = all(ticks[0, h].same(ticks[1, h]) for h in range(port.held_count))
    holds = plain and harmless and max(still, default=0.0) <= 1e-9
    counts = [_cells(mem, port, machine, *key, energy, bound) for key in pairs]
    volts = energy.worst_volts(bound)
    total = _Cells(
        looked=sum(c.looked for c in counts),
        grey=sum(c.grey for c in counts),
        wrong=sum(c.wrong for c in counts),
        whole=all(c.whole for c in counts),
    )
    closure = Closure(
        states=total.looked,
        steps=total.looked,
        grey=total.grey,
        bound_v=volts if holds else None,
        complete=holds and total.whole,
        differs=total.wrong,
        said=tuple(_said(total, volts, holds, plain, harmless)),
    )
    return Walk(closure, volts / float(mem.scale_v.min()), {}, None)


def _said(cells: "_Cells", volts: float, holds: bool, plain: bool, harmless: bool) -> list[str]:
    said = []
    if holds:
        said.append(
            "in the energy norm every mode shrinks the copies' error, so no copy is ever further than "
            f"{volts * 1e3:.3g} mV from its voltage, for every input sequence of any length"
        )
    if not harmless:
        said.append(
            "a flip inside a tick changes how the capacitors move; the port acts up to a tick later, and the bound "
            "does not cover what that lets in: it holds from settled states and between such flips"
        )
    if not plain:
        said.append(
            "one-way branches switch inside the box of states: the error there was measured at its corners, not bounded"
        )
    said.append(
        f"the whole box of states was looked at in every latch state and held combination, in {cells.looked:,} cells cut down "
        f"to the bound: {cells.wrong:,} decide differently, {cells.grey:,} are grey"
        + ("" if cells.whole else "; the cutting was stopped before it was done")
    )
    return said


class Energy:
    """The energy norm of errors in the kept states."""

    def __init__(self, mem: Memory) -> None:
        full = mem.engine.topo.cap_matrix(mem.engine.rows[:1])[0]
        self.C = full[np.ix_(mem.kept, mem.kept)]
        self.scale = mem.scale_v
        self.inverse = np.linalg.inv(self.C)

    def size(self, off: Floats) -> Floats:
        """Norm of errors whose every entry may have either sign, in copies, shape (B, kept) -> (B,)."""
        volts = np.abs(off) * self.scale
        return np.asarray(np.sqrt(np.einsum("bi,ij,bj->b", volts, np.abs(self.C), volts)))

    def factor(self, keep: Floats) -> float:
        """The largest factor by which a one-tick matrix (in copies) changes the norm."""
        half = np.linalg.cholesky(self.C).T
        in_volts = keep * self.scale[:, None] / self.scale[None, :]
        return float(np.linalg.norm(half @ in_volts @ np.linalg.inv(half), 2))

    def along(self, row: Floats, bound: float) -> float:
        """The most that ``row . e`` (e in volt) can be with a norm of *bound*."""
        return float(np.sqrt(row @ self.inverse @ row) * bound)

    def worst_volts(self, bound: float) -> float:
        """The most that any one copy can be off, volt."""
        return float(np.sqrt(np.diag(self.inverse).max()) * bound)


class _Tick:
    """One tick in one (q, held): the exact affine map, and the most the port's integers are off it."""

    def __init__(self, mem: Memory, machine: Charge, q: int, h: int, tick_s: float) -> None:
        corners = np.array(list(product((0, U16), repeat=len(mem.kept))), np.int64)
        lanes = mem.lanes(q, h, corners)
        mem.engine.resolve(lanes, frozen=True)
        self.one_mode = len(np.unique(lanes.conducts)) == 1
        middle = mem.volts(np.full((1, len(mem.kept)), U16 / 2))[0]
        self.keep, ends = one_tick(mem, settled_mode(mem.engine, q, h, middle), tick_s)
        self.ends = (ends - mem.low_v) / mem.scale_v
        mem.engine.run(lanes, tick_s, frozen=True)
        moves = machine.modes[q][h].moves
        moved = np.column_stack([move_copies(m, k, corners) for k, m in enumerate(moves)])
        # Both maps are affine but for the port's rounding, so corners hold the extremes up to twice that.
        self.off = np.abs(moved - mem.copies(lanes.x)).max(axis=0) + np.array([_rounding(m) for m in moves])

    def same(self, other: "_Tick") -> bool:
        """True where the two move alike, so that flipping a part of a tick later changes nothing."""
        return bool(
            np.allclose(self.keep, other.keep, atol=1e-9) and np.allclose(self.ends, other.ends, atol=1e-2)
        )


def _rounding(move: Move) -> float:
    return {"hold": 0.0, "jump": 0.0}.get(move.kind, 1.0 * max(1, len(move.keep)))


@dataclass(frozen=True, slots=True)
class _Cells:
    """What came of cutting: cells looked at, grey, wrong, and whether it was done to the end."""

    looked: int
    grey: int
    wrong: int
    whole: bool


def _cells(mem: Memory, port: Port, machine: Charge, q: int, h: int, energy: Energy, bound: float) -> _Cells:
    """Cut the box of one (q, held) until every cell is decided or smaller than the bound."""
    kept = len(mem.kept)
    unit = np.array(list(product((0, 1), repeat=kept)), np.int64)
    smallest = max(1, int(energy.worst_volts(bound) / float(mem.scale_v.max())))
    side = _FIRST
    low = np.array(list(product(range(0, U16, side), repeat=kept)), np.int64)
    looked = grey = wrong = 0
    while len(low):
        looked += len(low)
        corners = np.minimum(low[:, None, :] + unit[None] * side, U16)
        alike, differ, bad = _look(mem, port, machine, q, h, corners, energy, bound)
        wrong += int(bad.sum())
        open_ = low[~bad & (~alike | differ)]
        if side <= smallest:
            return _Cells(looked, grey + len(open_), wrong, True)
        if looked + len(open_) * len(unit) > _MOST_CELLS:
            return _Cells(looked, grey + len(open_), wrong, False)
        side //= 2
        low = (open_[:, None, :] + unit[None] * side).reshape(-1, kept)
    return _Cells(looked, grey, wrong, True)


def _look(
    mem: Memory, port: Port, machine: Charge, q: int, h: int, corners: Ints, energy: Energy, bound: float
) -> tuple[Mask, Mask, Mask]:
    """For cells given by their corners (B, 2**k, k): all signs alike; decisions differ; a corner surely differs."""
    count, each, kept = corners.shape
    flat = corners.reshape(-1, kept)
    here, there = (_sides(mem, level, h, flat, energy, bound) for level in (q, 1 - q))
    signs = [side.signs for side in (here, there)]
    tests = [_tests(machine.modes[level][h], flat) for level in (q, 1 - q)]
    signature = np.column_stack([*signs, *tests]).reshape(count, each, -1)
    alike = (signature == signature[:, :1]).all(axis=(1, 2))
    truth = circuit_decides(mem, q, h, flat).q
    decided = port_decides(
        port, State(np.full(len(flat), q, np.uint8), flat), np.full(len(flat), h, np.int64)
    )
    differ = (truth != decided).reshape(count, each).any(axis=1)
    flips = decided != q
    bad = (flips & ~(here.may & ~there.must)) | (~flips & here.must & ~there.may)
    return alike, differ, bad.reshape(count, each).any(axis=1)


@dataclass(frozen=True, slots=True)
class _Sides:
    """At some states: conducting set and signs of all guards; whether the latch may and must leave for some error within the bound."""

    signs: Ints
    may: Mask
    must: Mask


def _sides(mem: Memory, q: int, h: int, flat: Ints, energy: Energy, bound: float) -> _Sides:
    lanes = mem.lanes(q, h, flat)
    mem.engine.resolve(lanes, frozen=True)
    guards = mem.engine.guards(lanes)
    mode = settled_mode(mem.engine, q, h, mem.volts(np.full((1, flat.shape[1]), U16 / 2))[0])
    reach = _reach(mem, mode, energy, bound)
    below, above = guards < -reach, guards > reach
    trigger, reset = (below[:, 0], ~above[:, 0]), (below[:, 2], ~above[:, 2])  # must, may
    threshold = above[:, 1], ~below[:, 1]
    if q == 0:
        must, may = trigger[0] & ~reset[1], trigger[1] & ~reset[0]
    else:
        must = reset[0] | (threshold[0] & ~trigger[1])
        may = reset[1] | (threshold[1] & ~trigger[0])
    signs = np.column_stack([lanes.conducts, np.sign(guards).astype(np.int64)])
    return _Sides(signs, np.asarray(may), np.asarray(must))


def _reach(mem: Memory, mode: Mode, energy: Energy, bound: float) -> Floats:
    """How far each guard can be off, volt, shape (3,)."""
    rows = (mode.Gz[0, :3] @ mode.Sinv[0])[:, list(mem.kept)]
    return np.array([energy.along(row, bound) for row in rows])


def _tests(mode: ChargeMode, copies: Ints) -> Ints:
    """Whether each test of a mode holds, shape (B, tests)."""
    tests: tuple[Test, ...] = (*mode.force, *mode.flips, *mode.blocks)
    held = [_holds(test, copies) for test in tests]
    return np.column_stack(held) if held else np.zeros((len(copies), 0), np.int64)


def _holds(test: Test, copies: Ints) -> Ints:
    total = copies @ np.array(test.coeff, np.int64)
    return np.asarray(total >= test.limit if test.ge else total <= test.limit).astype(np.int64)
