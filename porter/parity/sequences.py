"""The literal check beside the proof: every input sequence to a depth, circuit by exact flow against the port."""

from dataclasses import dataclass

import numpy as np

from porter.behaviour.model import Behaviour
from porter.circuit.engine import Engine, Ints, Mask
from porter.circuit.values import Floats
from porter.parity.closure import Walk
from porter.parity.model import Sequences
from porter.parity.twin import Twin
from porter.port.memory import Memory
from porter.port.model import Charge, Port
from porter.spec.model import Circuit

_LANES = 1 << 10  # sequences walked side by side
_STRIDES = 6
_LONGEST = 400  # ticks that one symbol of a sequence lasts at most


@dataclass(frozen=True, slots=True)
class Enumerated:
    """The counts, and the first sequence found to differ (held masks per tick), if any."""

    sequences: Sequences
    witness: tuple[int, ...] | None


def enumerate_all(circuit: Circuit, behaviour: Behaviour, port: Port, mem: Memory, walk: Walk) -> Enumerated:
    """Walk all sequences of held combinations, each combination lasting a stride of ticks.

    Args:
        walk: the closure, for its bound and edges: a lane is grey from where a copy comes within
            the bound of an edge of the circuit's decision.
    """
    depth = max(3, int(np.log2(_LANES)) // len(circuit.buttons)) if circuit.buttons else 1
    engine = mem.engine
    count = differences = grey = 0
    witness: tuple[int, ...] | None = None
    chosen = strides(behaviour, port, mem)
    for stride in chosen:
        found = _walk(circuit, engine, port, depth, stride, walk.bound, walk.edges)
        count, differences, grey = count + found.count, differences + found.differences, grey + found.grey
        if found.witness is not None and (witness is None or len(found.witness) < len(witness)):
            witness = found.witness
    return Enumerated(Sequences(depth, count, differences, grey, chosen), witness)


def strides(behaviour: Behaviour, port: Port, mem: Memory) -> tuple[int, ...]:
    """Choose how long a symbol lasts: a tick, shares of the memory's time constant, each window short and long."""
    found = {1}
    slowest = (
        [1 / rate for mode in mem.engine.modes for rate in mode.rate[0] if rate > 1e-9] if mem.kept else []
    )
    for factor in (0.4, 1.3) if slowest else ():
        found.add(int(np.clip(round(max(slowest) * factor / port.tick_s), 1, _LONGEST)))
    for window in behaviour.windows:
        seconds = window.seconds.nominal
        if seconds:
            for factor in (0.55, 1.15):
                found.add(int(np.clip(round(seconds * factor / port.tick_s), 1, _LONGEST)))
    return tuple(sorted(found))[:_STRIDES]


@dataclass(frozen=True, slots=True)
class _Count:
    count: int
    differences: int
    grey: int
    witness: tuple[int, ...] | None


def _walk(
    circuit: Circuit,
    engine: Engine,
    port: Port,
    depth: int,
    stride: int,
    bound: float,
    edges: dict[tuple[int, int], Floats],
) -> _Count:
    masks = port.held_count
    twin = Twin.powered(circuit, port, engine)
    grey, wrong = np.zeros(1, bool), np.zeros(1, bool)
    sequence = np.zeros((1, 0), np.int64)
    witness: tuple[int, ...] | None = None
    for _ in range(depth):
        rows = np.repeat(np.arange(len(grey)), masks)
        held = np.tile(np.arange(masks), len(grey))
        twin, grey, wrong = twin.take(rows), grey[rows], wrong[rows]
        sequence = np.column_stack([sequence[rows], held])
        before = twin.state.q.astype(np.int64)
        pending = twin.lanes.q != before
        circuit_q, twice = twin.circuit_for(held, stride)
        for tick in range(stride):
            grey |= _near(port, twin, held, bound, edges)
            port_q = twin.port_tick(held)
            new = (port_q != circuit_q[:, tick]) & ~grey & ~wrong
            wrong |= new
            # The circuit was there and back while the port stayed: alike to look at, not in memory.
            grey |= pending & (tick == 0) & (port_q == before) & ~wrong
            if new.any() and witness is None:
                witness = _spell(sequence[np.argmax(new)], stride, tick)
        wrong |= twice & ~grey
    return _Count(len(grey), int(wrong.sum()), int((grey & ~wrong).sum()), witness)


def _near(port: Port, twin: Twin, held: Ints, bound: float, edges: dict[tuple[int, int], Floats]) -> Mask:
    """Where a copy is within the bound of an edge of the decision about to be made."""
    near = np.zeros(len(held), bool)
    if not isinstance(port.machine, Charge):
        return near
    if not edges:
        return _near_planes(port.machine, twin, held, bound)
    X, mode = twin.state.regs[:, 0], twin.state.q.astype(np.int64) * port.held_count + held
    for (q, h), at in edges.items():
        if len(at):
            rows = mode == q * port.held_count + h
            for edge in at:
                near |= rows & (np.abs(X - edge) <= bound + 0.5)
    return near


def _near_planes(machine: Charge, twin: Twin, held: Ints, bound: float) -> Mask:
    """The same for several copies: within the bound of one of the mode's own half-spaces."""
    near = np.zeros(len(held), bool)
    for q in (0, 1):
        for h in range(len(machine.modes[0])):
            rows = np.flatnonzero((twin.state.q == q) & (held == h))
            mode = machine.modes[q][h]
            for test in (*mode.force, *mode.flips, *mode.blocks):
                coeff = np.array(test.coeff, np.int64)
                off = np.abs(twin.state.regs[rows] @ coeff - test.limit)
                near[rows] |= off <= np.abs(coeff).sum() * (bound + 1.0)
    return near


def _spell(symbols: Ints, stride: int, tick: int) -> tuple[int, ...]:
    """Write a sequence out tick by tick, up to the tick that differs."""
    full = [int(h) for h in symbols[:-1] for _ in range(stride)]
    return (*full, *([int(symbols[-1])] * (tick + 1)))
