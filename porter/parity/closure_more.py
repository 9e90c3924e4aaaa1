"""Closures of ports that carry no capacitor: nothing remembered, and counters beside one capacitor."""

from dataclasses import dataclass
from itertools import groupby

import numpy as np
from numpy.typing import NDArray

from porter.behaviour.model import Behaviour
from porter.circuit.engine import Ints
from porter.parity.closure import Walk
from porter.parity.family import PortMachine, Stage, clock_ends, laid_out, lengths, units
from porter.parity.model import Closure
from porter.parity.twin import circuit_decides, circuit_moves, port_decides
from porter.port.memory import Memory
from porter.port.model import U16, Port, State
from porter.port.step import start, step
from porter.spec.model import Circuit

_CELLS = 1024  # intervals that a capacitor's range is cut in beside a counting port


# --- nothing carried: the product is finite ---


def walk_plain(mem: Memory, port: Port) -> Walk:
    """Close the product of a port and a circuit whose only memory is the latch."""
    masks = port.held_count
    begin = start(port, 1)
    key = _key(begin, np.array([port.start_q]))
    seen: dict[bytes, tuple[int, ...]] = {key[0]: ()}
    front = [(begin, np.array([port.start_q], np.int64), [()])]
    steps = 0
    wrong: tuple[int, ...] | None = None
    differs = 0
    while front:
        state, q, paths = front.pop()
        count = len(q)
        held = np.tile(np.arange(masks), count)
        rows = np.repeat(np.arange(count), masks)
        again = State(state.q[rows], state.regs[rows])
        truth = circuit_decides(mem, q[rows], held, np.zeros((len(rows), len(mem.kept)))).q
        after, _ = step(port, again, held)
        steps += len(rows)
        off = np.flatnonzero(after.q != truth)
        differs += len(off)
        if len(off) and wrong is None:
            wrong = (*paths[rows[off[0]]], int(held[off[0]]))
        keys = _key(after, truth)
        fresh = [i for i, k in enumerate(keys) if k not in seen and after.q[i] == truth[i]]
        for i in fresh:
            seen.setdefault(keys[i], ())
        picked = list({keys[i]: i for i in fresh}.values())
        if picked:
            more = [(*paths[rows[i]], int(held[i])) for i in picked]
            front.insert(0, (State(after.q[picked], after.regs[picked]), truth[picked], more))
    said = (
        f"port and circuit together have {len(seen)} reachable states; all were visited with every held combination",
        "they decide differently in some of them"
        if differs
        else "their outputs are equal at every tick of every input sequence of any length: proved, with no exception",
    )
    closure = Closure(len(seen), steps, 0, None, True, differs, said)
    return Walk(closure, 0.0, {}, wrong)


def _key(state: State, q: Ints) -> list[bytes]:
    rows = np.column_stack([state.q.astype(np.int64), state.regs, q])
    return [row.tobytes() for row in rows]


# --- counters beside one capacitor ---


def walk_count(circuit: Circuit, behaviour: Behaviour, mem: Memory, port: Port) -> Walk:
    """Close a counting port against cells of the circuit's capacitor, rounded outward.

    Cells let the capacitor linger longer than it does, so a pair that decides differently is a
    suspicion.  Each one's press sequence is run through the port and through units that span the
    family; where every unit does otherwise than the port, the port is refuted.
    """
    ports = _port_states(port)
    cells = _Cells(mem, port)
    found = _pairs(port, mem, ports, cells)
    paths = [_runs(found.path(at)) for at in found.suspects]
    guilty = _judge(circuit, behaviour, port, paths)
    witness = min(
        (paths[i] for i in np.flatnonzero(guilty)), key=lambda p: sum(t for _, t in p), default=None
    )
    grey = len(paths) - int(guilty.sum())
    said = (
        f"every reachable pair of a port state and a cell of the capacitor's range ({_CELLS} cells, rounded outward) was visited: {found.visited:,}",
        f"in {len(paths):,} of them port and nominal circuit may decide differently; their press sequences were run through port and "
        f"units that span the family: in {grey:,} some allowed unit does as the port does"
        + (f", in {int(guilty.sum()):,} none does" if guilty.any() else ""),
    )
    closure = Closure(found.visited, found.steps, grey, None, found.whole, int(guilty.sum()), said)
    path = None if witness is None else tuple(m for m, t in witness for _ in range(t))
    return Walk(closure, 0.0, {}, path)


_SUSPECTS = 512  # pairs whose sequences are run


@dataclass(slots=True)
class _Found:
    """Reachable pairs ``(port * 2 + q) * cells + cell``, how each was come to, and which are suspect."""

    parents: Ints
    suspects: list[tuple[int, int]]
    masks: int
    visited: int
    steps: int
    whole: bool

    def path(self, suspect: tuple[int, int]) -> list[int]:
        """Return the held masks from power-on to a suspect pair, its own last."""
        state, held = suspect
        out = [held]
        while self.parents[state] >= 0:
            out.append(int(self.parents[state] % self.masks))
            state = int(self.parents[state] // self.masks)
        return out[::-1]


def _pairs(port: Port, mem: Memory, ports: "_PortStates", cells: "_Cells") -> _Found:
    masks = port.held_count
    parents = np.full(len(ports.q) * 2 * _CELLS, -2, np.int64)  # -2: not reached
    begin = mem.copies(mem.engine.empty(0).x)[0, 0] / U16 * _CELLS
    first = np.unique(np.clip([int(begin) - 1, int(begin), int(begin) + 1], 0, _CELLS - 1))
    front = port.start_q * _CELLS + first
    parents[front] = -1
    suspects: list[tuple[int, int]] = []
    doubted = np.zeros((len(ports.q), 2, masks), bool)
    steps, whole = 0, True
    while len(front):
        new: list[Ints] = []
        p, q, c = front // (2 * _CELLS), front // _CELLS % 2, front % _CELLS
        for h in range(masks):
            steps += len(front)
            for side in (0, 1):
                truth = cells.truth[h][side][q, c]
                same = ports.decided[p, h] == truth
                # One suspect for each port state, latch and held mask: the first cell that gives it.
                fresh = np.flatnonzero(~same & ~doubted[p, q, h])
                doubted[p[fresh], q[fresh], h] = True
                room = _SUSPECTS - len(suspects)
                whole &= len(fresh) <= room
                suspects += [(int(front[i]), h) for i in fresh[:room]]
                new += _reached(
                    parents, front[same], ports.next[p[same], h], truth[same], cells, h, c[same], masks
                )
        front = np.concatenate(new) if new else front[:0]
    return _Found(parents, suspects, masks, int((parents > -2).sum()), steps, whole)


def _reached(
    parents: Ints, source: Ints, to: Ints, q: Ints, cells: "_Cells", h: int, cell: Ints, masks: int
) -> list[Ints]:
    """Mark the cells that a tick may lead to; returns those not met before."""
    low, high = cells.moved(q, h, cell)
    out = []
    for k in range(int((high - low).max(initial=0)) + 1):
        state = (to * 2 + q) * _CELLS + np.minimum(low + k, high)
        fresh = parents[state] == -2
        parents[state[fresh]] = source[fresh] * masks + h
        out.append(np.unique(state[fresh]))
    return out


def _runs(masks: list[int]) -> list[tuple[int, int]]:
    return [(mask, len(list(group))) for mask, group in groupby(masks)]


def _judge(
    circuit: Circuit, behaviour: Behaviour, port: Port, paths: list[list[tuple[int, int]]]
) -> NDArray[np.bool_]:
    """Run suspects' sequences, the last mask held on, through port and family."""
    if not paths:
        return np.zeros(0, bool)
    machine = PortMachine(port)
    rest = int(lengths(behaviour, machine)[-1])
    presses = laid_out([[*path, (path[-1][0], rest)] for path in paths], rest)
    rows, ends = units(circuit, behaviour), clock_ends(circuit)
    stage = Stage.set(circuit, rows, presses, ends, port.tick_s, port.start_q)
    return np.asarray(np.isfinite(stage.parted(machine)).any(axis=0))


class _PortStates:
    """All reachable states of a counting port, tabulated."""

    def __init__(self, q: Ints, next_: Ints, decided: Ints) -> None:
        self.q, self.next, self.decided = q, next_, decided


def _port_states(port: Port) -> _PortStates:
    index: dict[bytes, int] = {}
    states: list[State] = []

    def number(state: State) -> int:
        key = state.q.tobytes() + state.regs.tobytes()
        if key not in index:
            index[key] = len(states)
            states.append(state)
        return index[key]

    number(start(port, 1))
    nexts, decided = [], []
    masks = np.arange(port.held_count)
    i = 0
    while i < len(states):
        wide = State(np.repeat(states[i].q, len(masks)), np.repeat(states[i].regs, len(masks), axis=0))
        after, _ = step(port, wide, masks)
        nexts.append([number(State(after.q[k : k + 1], after.regs[k : k + 1])) for k in range(len(masks))])
        decided.append(port_decides(port, wide, masks))
        i += 1
    q = np.array([int(s.q[0]) for s in states])
    return _PortStates(q, np.array(nexts), np.array(decided))


class _Cells:
    """The circuit over cells of its one capacitor: decisions at both ends, where a tick takes each cell."""

    def __init__(self, mem: Memory, port: Port) -> None:
        self.width = U16 / _CELLS
        low = np.arange(_CELLS) * self.width
        ends = (low, low + self.width)
        self.truth: dict[int, list[Ints]] = {}
        self._moves: dict[tuple[int, int], tuple[Ints, Ints]] = {}
        for h in range(port.held_count):
            self.truth[h] = [
                np.stack([circuit_decides(mem, q, h, end[:, None]).q for q in (0, 1)]) for end in ends
            ]
            for q in (0, 1):
                moved = [
                    mem.copies(circuit_moves(mem, q, h, end[:, None], port.tick_s).x)[:, 0] for end in ends
                ]
                least = np.floor(np.minimum(*moved) / self.width - 1e-9).astype(np.int64)
                most = np.floor(np.maximum(*moved) / self.width + 1e-9).astype(np.int64)
                self._moves[q, h] = np.clip(least, 0, _CELLS - 1), np.clip(most, 0, _CELLS - 1)

    def moved(self, q: Ints, h: int, cell: Ints) -> tuple[Ints, Ints]:
        """Return the first and last cell that a tick may lead to."""
        low = np.stack([self._moves[k, h][0] for k in (0, 1)])
        high = np.stack([self._moves[k, h][1] for k in (0, 1)])
        return low[q, cell], high[q, cell]
