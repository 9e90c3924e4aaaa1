"""Closures of ports that carry no capacitor: nothing remembered, and counters beside one capacitor."""

import numpy as np
from numpy.typing import NDArray

from porter.circuit.engine import Ints
from porter.circuit.values import Floats
from porter.parity.closure import Walk
from porter.parity.model import Closure
from porter.parity.twin import circuit_decides, circuit_moves, port_decides
from porter.port.memory import Memory, settled_mode
from porter.port.model import U16, Port, State
from porter.port.step import start, step

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


def walk_count(mem: Memory, port: Port, slack_s: float) -> Walk:
    """Close a counting port against cells of the circuit's capacitor, rounded outward.

    Args:
        slack_s: how far in time a decision may lie from the circuit's and still be between two
            allowed units; a difference beyond it refutes the port.
    """
    ports = _port_states(port)
    cells = _Cells(mem, port)
    seen = np.zeros((len(ports.q), 2, _CELLS), bool)
    first = int(np.clip(mem.copies(mem.engine.empty(0).x)[0, 0] / U16 * _CELLS, 0, _CELLS - 1))
    seen[0, port.start_q, max(first - 1, 0) : first + 2] = True
    front = seen.copy()
    grey = wrong = steps = 0
    widest = 0.0
    while front.any():
        new = np.zeros_like(seen)
        for h in range(port.held_count):
            p, q, c = np.nonzero(front)
            steps += len(p)
            to = ports.next[p, h]
            decided = ports.decided[p, h]
            for side in (0, 1):
                truth = cells.truth[h][side][q, c]
                same = decided == truth
                distance = np.where(same, 0.0, cells.distance[h][q, c])
                grey += int((~same & (distance <= slack_s)).sum())
                wrong += int((~same & (distance > slack_s)).sum())
                widest = max(widest, float(distance.max(initial=0.0)))
                low, high = cells.moved(truth[same], h, c[same])
                for k in range(int((high - low).max(initial=0)) + 1):
                    new[to[same], truth[same], np.minimum(low + k, high)] = True
        front = new & ~seen
        seen |= new
    said = (
        f"every reachable pair of a port state and a cell of the capacitor's range ({_CELLS} cells, rounded outward) was visited: {int(seen.sum()):,}",
        f"the port decides up to {widest * 1e3:.3g} ms earlier or later than the nominal circuit, in {grey:,} pairs within the spread of allowed units"
        + (f" and in {wrong:,} beyond it" if wrong else ""),
    )
    closure = Closure(int(seen.sum()), steps, grey, None, True, wrong, said)
    return Walk(closure, 0.0, {}, None)


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
        self.distance: dict[int, Floats] = {}
        self._moves: dict[tuple[int, int], tuple[Ints, Ints]] = {}
        for h in range(port.held_count):
            self.truth[h] = [
                np.stack([circuit_decides(mem, q, h, end[:, None]).q for q in (0, 1)]) for end in ends
            ]
            self.distance[h] = np.stack([self._times(mem, q, h, ends[0]) for q in (0, 1)])
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

    def _times(self, mem: Memory, q: int, h: int, copies: NDArray[np.floating]) -> Floats:
        """Seconds of open contact between a cell and the copy at which the decision changes."""
        truth = circuit_decides(mem, q, h, copies[:, None]).q
        turns = np.flatnonzero(np.diff(truth))
        if not len(turns):
            return np.full(len(copies), np.inf)
        edges = copies[turns + 1]
        mode = settled_mode(mem.engine, q, 0, mem.volts(np.array([[U16 / 2]]))[0])
        rate = float(mode.rate[0].max())
        end = float(
            mem.copies((mode.S[0] @ (mode.drive[0] / np.maximum(mode.rate[0], 1e-12)))[None, :])[0, 0]
        )
        with np.errstate(divide="ignore", invalid="ignore"):
            gaps = np.abs(np.log(np.abs((copies[:, None] - end) / (edges[None, :] - end)))) / rate
        return np.asarray(np.nan_to_num(gaps, nan=np.inf).min(axis=1) + self.width / U16 / rate)
