"""The outputs' bits of a port, latch by latch and button by button, against what the network drives."""

import dataclasses
from collections.abc import Iterator

import numpy as np

from porter.circuit.engine import Engine, Ints
from porter.parity.closure import Walk
from porter.port.model import Port, State
from porter.port.plan import answers
from porter.port.step import start
from porter.port.swift import stepper

_DEPTH = 4  # held combinations after each other that are tried to come to a latch state
_MOST = 1 << 12


def check_answers(engine: Engine, port: Port, walk: Walk, rest: int) -> Walk:
    """Return the walk with what the outputs' table adds to it.

    Args:
        rest: ticks after which port and circuit are at rest.
    """
    true = answers(engine)
    wrong = [(q, h) for q in (0, 1) for h in range(port.held_count) if port.answer[q][h] != true[q][h]]
    found = [path for at in wrong if (path := _come_to(port, *at, rest)) is not None]
    if not found:
        return walk
    best = min((*found, *((walk.path,) if walk.path else ())), key=len)
    said = f"the outputs are driven otherwise than the circuit's in {len(found)} combinations of latch and buttons"
    closure = walk.closure
    closure = dataclasses.replace(closure, differs=closure.differs + len(found), said=(*closure.said, said))
    return dataclasses.replace(walk, closure=closure, path=best)


def _come_to(port: Port, q: int, h: int, rest: int) -> tuple[int, ...] | None:
    """Return held masks per tick that bring a port to a latch state with these buttons, None where none is found."""
    for stride in (1, rest):
        for masks, latch in _sequences(port, stride):
            at = np.flatnonzero((latch == q) & (masks[:, -1] == h))
            if len(at):
                path = np.repeat(masks[at[0]], stride)
                return tuple(path[: len(path) - stride + 1].tolist())
    return None


def _sequences(port: Port, stride: int) -> Iterator[tuple[Ints, Ints]]:
    """Yield all sequences of held masks, shape (B, depth), with the latch as the last one is first seen."""
    step, masks = stepper(port), np.arange(port.held_count)
    state, tried = start(port, 1), np.zeros((1, 0), np.int64)
    for _ in range(_DEPTH):
        if len(tried) * port.held_count > _MOST:
            return
        held = np.tile(masks, len(tried))
        tried = np.column_stack([np.repeat(tried, port.held_count, axis=0), held])
        state = State(np.repeat(state.q, len(masks)), np.repeat(state.regs, len(masks), axis=0))
        state, _ = step(state, held)
        yield tried, state.q.astype(np.int64)
        for _ in range(stride - 1):
            state, _ = step(state, held)
