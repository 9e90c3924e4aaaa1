"""The port's reference step function, batched: what the firmware does, to the bit."""

from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from porter.port.model import U16, Charge, ChargeMode, Count, Move, Port, State, Test

Ints = NDArray[np.int64]
Mask = NDArray[np.bool_]
M = TypeVar("M", bound=np.generic)


def start(port: Port, lanes: int = 1) -> State:
    """Return the power-on state of *lanes* ports."""
    q = np.full(lanes, port.start_q, np.uint8)
    return State(q, np.tile(np.array(_first_regs(port), np.int64), (lanes, 1)))


def _first_regs(port: Port) -> tuple[int, ...]:
    if isinstance(port.machine, Charge):
        return port.machine.start
    return (0,) * (len(port.buttons) + 2)


def step(port: Port, state: State, held: NDArray[np.integer]) -> tuple[State, NDArray[np.uint8]]:
    """Advance a batch by one tick.

    Args:
        state: of B lanes.
        held: shape (B,), the held mask of each lane for this tick.

    Returns:
        The state after the tick and the outputs' bits of the tick, shape (B,) uint8.
    """
    masks: Ints = held.astype(np.int64)
    stepper = _step_charge if isinstance(port.machine, Charge) else _step_count
    after = stepper(port, state, masks)
    return after, np.array(port.answer, np.uint8)[after.q, masks]


def run(port: Port, held: NDArray[np.integer]) -> NDArray[np.uint8]:
    """Return the outputs of ports driven from power-on; `held` and result have shape (B, ticks)."""
    state = start(port, held.shape[0])
    out = np.empty(held.shape, np.uint8)
    for tick in range(held.shape[1]):  # each tick needs the one before it
        state, out[:, tick] = step(port, state, held[:, tick])
    return out


def idle(port: Port, state: State, held: NDArray[np.integer]) -> Mask:
    """True where stepping with the same *held* for ever changes neither state nor outputs.

    The state is taken after a step with *held*; one more step that changes nothing is a
    fixed point, since the step is a function of state and held alone.
    """
    after, _ = step(port, state, held)
    return np.asarray((after.q == state.q) & (after.regs == state.regs).all(axis=1))


# --- charge ---


def _step_charge(port: Port, state: State, held: Ints) -> State:
    machine = port.machine
    assert isinstance(machine, Charge)
    q = decide(machine, state.q, state.regs, held)
    return State(q, _move(machine, q, state.regs, held))


def decide(machine: Charge, q: NDArray[np.uint8], regs: Ints, held: Ints) -> NDArray[np.uint8]:
    """Return the latch after the decision of one tick, shape (B,)."""
    first = _flips(machine, q, regs, held)
    back = _flips(machine, (q ^ 1).astype(np.uint8), regs, held)
    return np.where(first & ~back, q ^ 1, q).astype(np.uint8)


def _flips(machine: Charge, q: NDArray[np.uint8], regs: Ints, held: Ints) -> Mask:
    flips = np.zeros(len(q), bool)
    for mode, lanes in _by_mode(machine, q, held):
        part = regs[lanes]
        flips[lanes] = _any(mode.force, part) | (_any(mode.flips, part) & ~_any(mode.blocks, part))
    return flips


def _any(tests: tuple[Test, ...], regs: Ints) -> Mask:
    held = np.zeros(len(regs), bool)
    for test in tests:
        held |= _holds(test, regs)
    return held


def _holds(test: Test, regs: Ints) -> Mask:
    total = regs @ np.array(test.coeff, np.int64)
    return np.asarray(total >= test.limit if test.ge else total <= test.limit)


def _by_mode(machine: Charge, q: NDArray[np.uint8], held: Ints) -> list[tuple[ChargeMode, Ints]]:
    count = len(machine.modes[0])
    key = q.astype(np.int64) * count + held
    return [(machine.modes[k // count][k % count], np.flatnonzero(key == k)) for k in np.unique(key)]


def _move(machine: Charge, q: NDArray[np.uint8], regs: Ints, held: Ints) -> Ints:
    after = regs.copy()
    for mode, lanes in _by_mode(machine, q, held):
        for k, move in enumerate(mode.moves):
            after[lanes, k] = move_copies(move, k, regs[lanes])
    return after


def move_copies(move: Move, k: int, regs: Ints) -> Ints:
    """Return copy *k* of each lane after one tick of *move*; `regs` has shape (B, copies)."""
    if move.kind == "mix":
        return _mix(move, regs)
    X = regs[:, k]
    return U16 - _moved(move, U16 - X) if move.mirror else _moved(move, X)


def _moved(move: Move, X: Ints) -> Ints:
    if move.kind == "hold":
        return X
    if move.kind == "jump":
        return np.full_like(X, move.end)
    if move.kind == "scale":
        return _allowed(move, X, (X * move.rate >> 16) + move.add)
    if move.kind == "drain":
        return _allowed(move, X, X - (X >> move.shift) + move.add)
    far = np.abs(X - move.end)
    if move.kind == "shift":
        by = (far + ((1 << move.shift) >> 1)) >> move.shift
    else:
        by = (far * move.rate + 32768) >> 16
    return _allowed(move, X, np.where(X < move.end, X + by, X - by))


def _allowed(move: Move, X: Ints, to: Ints) -> Ints:
    """Return *to*, but X itself on the side of the end from which the move does nothing."""
    if move.only == "both":
        return to
    return np.where(X < move.end if move.only == "up" else X > move.end, to, X)


def _mix(move: Move, regs: Ints) -> Ints:
    total = np.full(len(regs), move.end, np.int64)
    for j, (keep, end) in enumerate(zip(move.keep, move.ends, strict=True)):
        d = regs[:, j] - end
        if keep == 65536:
            total += d
            continue
        size = (np.abs(d) * abs(keep) + 32768) >> 16
        total += np.sign(d) * np.sign(keep) * size
    return np.clip(total, 0, U16)


# --- count ---


def _step_count(port: Port, state: State, held: Ints) -> State:
    machine = port.machine
    assert isinstance(machine, Count)
    n = len(port.buttons)
    filters, down = _filter(machine, state.regs[:, :n], state.regs[:, n], held)
    c = state.regs[:, n + 1]
    q = np.array(machine.table, np.int64)[state.q, down]
    if machine.toggle is not None:
        q, c = _toggle(machine, q, down, c)
    regs = np.column_stack([filters, down, c])
    return State(q.astype(np.uint8), regs)


def _filter(machine: Count, filters: Ints, down: Ints, held: Ints) -> tuple[Ints, Ints]:
    bits = np.arange(filters.shape[1])
    raw, now = held[:, None] >> bits & 1, down[:, None] >> bits & 1
    need = np.where(raw == 1, np.array(machine.press), np.array(machine.release))
    filters = np.where(raw == now, 0, filters + 1)
    turn = (raw != now) & (filters >= need)
    now = np.where(turn, raw, now)
    return np.where(turn, 0, filters), (now << bits).sum(axis=1)


def _toggle(machine: Count, q: Ints, down: Ints, c: Ints) -> tuple[Ints, Ints]:
    toggle = machine.toggle
    assert toggle is not None
    pressed = (down >> toggle.button & 1) == 1
    acts = pressed & np.array(machine.live)[down] & (c == 0)
    q = np.where(acts, 1 - q, q)
    c = np.where(acts, np.array(toggle.tap)[q], c)
    hold, pace = np.array(toggle.hold)[q], np.array(toggle.pace)[q]
    toward = c + np.clip(hold - c, -pace, pace)
    return q, np.where(pressed, toward, np.maximum(c - 1, 0))
