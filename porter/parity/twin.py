"""Circuit and port side by side, one tick at a time.

The relation compared throughout: inputs change on tick boundaries; at boundary
k both decide with what they remember, then both move through the tick.  Where
the circuit flips inside a tick the port flips at the next boundary, where both
are compared again.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from porter.circuit.engine import Engine, Ints, Lanes, Mask
from porter.circuit.values import Floats
from porter.port.memory import Memory, memory
from porter.port.model import Port, State
from porter.port.step import start
from porter.port.swift import decider, stepper
from porter.spec.model import Circuit


@dataclass(slots=True)
class Twin:
    """A batch of circuits and ports that get the same presses.

    Args:
        lanes: the circuits; state: the ports.
        twice: where the circuit flipped more than once inside one tick, shape (B,).
    """

    engine: Engine
    port: Port
    lanes: Lanes
    state: State
    twice: Mask

    @staticmethod
    def powered(circuit: Circuit, port: Port, engine: Engine | None = None, lanes: int = 1) -> "Twin":
        """Return twins just powered on, the circuit's latch where the port starts."""
        engine = engine or Engine(circuit)
        zeros = np.zeros(lanes, np.int64)
        return Twin(
            engine, port, engine.empty(port.start_q, zeros), start(port, lanes), np.zeros(lanes, bool)
        )

    def tick(self, held: Ints) -> tuple[Ints, Ints]:
        """Give all the held masks of one tick; returns both latches right after the boundary's decision."""
        self.engine.press(self.lanes, held)
        decided = self.lanes.q.copy()
        self.state, _ = stepper(self.port)(self.state, held)
        flips = self.lanes.flips.copy()
        self.engine.run(self.lanes, self.port.tick_s)
        self.twice |= self.lanes.flips - flips > 1
        return decided, self.state.q.astype(np.int64)

    def circuit_for(self, held: Ints, ticks: int) -> tuple[Ints, Mask]:
        """Hold masks for some ticks; returns the circuit's latch at each boundary, and where it flipped twice in one.

        Shapes (B, ticks) and (B,).  The port is left where it was.
        """
        tick_s, count = self.port.tick_s, len(self.lanes)
        self.engine.press(self.lanes, held)
        decided = self.lanes.q.copy()
        begin = self.lanes.clock_s.copy()
        flips = np.zeros((count, ticks + 1), np.int16)

        def listen(rows: Ints, times: Floats, _: Ints) -> None:
            boundary = np.ceil((times - begin[rows]) / tick_s - 1e-9).astype(np.int64)
            np.add.at(flips, (rows, np.clip(boundary, 0, ticks)), 1)

        self.engine.run(self.lanes, ticks * tick_s, listener=listen)
        turned = np.cumsum(flips[:, :ticks], axis=1)
        return (decided[:, None] + turned) & 1, np.asarray((flips > 1).any(axis=1))

    def port_tick(self, held: Ints) -> Ints:
        """Step the ports alone; returns their latches."""
        self.state, _ = stepper(self.port)(self.state, held)
        return self.state.q.astype(np.int64)

    def take(self, rows: NDArray[np.integer] | Mask) -> "Twin":
        """Return a copy of some of the batch."""
        state = State(self.state.q[rows].copy(), self.state.regs[rows].copy())
        return Twin(self.engine, self.port, self.lanes.take(rows), state, self.twice[rows].copy())


def port_decides(port: Port, state: State, held: Ints) -> Ints:
    """Return the port's latch after the decision of a tick, without moving."""
    return decider(port)(state, held).astype(np.int64)


def circuit_decides(
    mem: Memory, q: Ints | int, held: Ints | int, copies: NDArray[np.integer | np.floating]
) -> Lanes:
    """Return circuits that have decided at this instant with their capacitors at the copies' voltages."""
    lanes = mem.lanes(q, held, copies)
    mem.engine.resolve(lanes)
    return lanes


def circuit_moves(
    mem: Memory, q: Ints | int, held: Ints | int, copies: NDArray[np.integer | np.floating], tick_s: float
) -> Lanes:
    """Return circuits one tick after their decision at q."""
    lanes = mem.lanes(q, held, copies)
    mem.engine.run(lanes, tick_s)
    return lanes


__all__ = ["Twin", "circuit_decides", "circuit_moves", "memory", "port_decides"]
