"""The quick stepper is the reference step, whatever the port."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from porter.port.model import U16, Charge, ChargeMode, Count, Move, Port, State, Toggle
from porter.port.model import Test as Check  # pytest takes a name with Test for a test
from porter.port.step import idle, run, start, step
from porter.port.swift import decider, stepper

WORD = st.integers(0, U16)
ONLY = st.sampled_from(["both", "up", "down"])


@st.composite
def moves(draw) -> Move:
    """A move of one copy, of any kind but ``mix``, that keeps every copy within its 16 bits."""
    kind = draw(st.sampled_from(["hold", "jump", "shift", "multiply", "scale", "drain"]))
    shift, rate, add = 0, 0, 0
    if kind in ("shift", "drain"):
        shift = draw(st.integers(1, 15))
    if kind in ("multiply", "scale"):
        rate = draw(st.integers(1, U16))
    if kind == "scale":
        add = draw(st.integers(0, U16 - (U16 * rate >> 16)))
    if kind == "drain":
        add = draw(st.integers(0, U16 >> shift))
    only = draw(ONLY) if kind not in ("hold", "jump") else "both"
    return Move(kind, draw(WORD), shift=shift, rate=rate, add=add, only=only, mirror=draw(st.booleans()))


def _tests(copies: int):
    coeff = st.just((1,)) if copies == 1 else st.tuples(*[st.integers(-32767, 32767)] * copies)
    limit = WORD if copies == 1 else st.integers(-(2**30), 2**30)
    return st.lists(st.builds(Check, coeff, st.booleans(), limit), max_size=2).map(tuple)


def _modes(copies: int):
    return st.builds(
        ChargeMode,
        flips=_tests(copies),
        moves=st.tuples(*[moves()] * copies),
        force=_tests(copies),
        blocks=_tests(copies),
    )


def _port(machine: Count | Charge, buttons: int, answer) -> Port:
    return Port(
        name="any_port",
        title="Any port",
        spec_file="any_port.yaml",
        spec_sha256="0" * 64,
        buttons=("A", "B")[:buttons],
        outputs=("lamp", "horn"),
        tick_s=1e-3,
        style="charge" if isinstance(machine, Charge) else "count",
        start_q=0,
        answer=answer,
        machine=machine,
        constants=(),
        why=(),
    )


@st.composite
def charge_ports(draw, copies: int) -> Port:
    """A charge port of one or two buttons."""
    buttons = draw(st.integers(1, 2))
    width = 1 << buttons
    rows = [tuple(draw(_modes(copies)) for _ in range(width)) for _ in (0, 1)]
    machine = Charge(
        capacitors=("a", "b")[:copies],
        low_v=(0.0,) * copies,
        scale_v=(1e-4,) * copies,
        start=tuple(draw(WORD) for _ in range(copies)),
        modes=(rows[0], rows[1]),
    )
    answer = tuple(tuple(draw(st.integers(0, 3)) for _ in range(width)) for _ in (0, 1))
    return _port(machine, buttons, answer)


def _states(port: Port, seed: int, lanes: int = 400) -> tuple[State, np.ndarray]:
    """Random states and held masks; ends and limits of the port are among the copies."""
    rng = np.random.default_rng(seed)
    modes = [mode for row in port.machine.modes for mode in row]
    known = [m.end for mode in modes for m in mode.moves]
    known += [t.limit for mode in modes for t in (*mode.force, *mode.flips, *mode.blocks)]
    near = np.array([value + off for value in known for off in (-1, 0, 1)] + [0, U16])
    regs = rng.integers(0, U16 + 1, (lanes, len(port.machine.start)))
    pick = rng.random(regs.shape) < 0.5
    regs[pick] = np.clip(rng.choice(near, pick.sum()), 0, U16)
    q = rng.integers(0, 2, lanes).astype(np.uint8)
    return State(q, regs.astype(np.int64)), rng.integers(0, port.held_count, lanes)


def _same(port: Port, state: State, held: np.ndarray) -> None:
    expected, wanted = step(port, state, held)
    actual, given_ = stepper(port)(state, held)
    assert (expected.q == actual.q).all()
    assert (expected.regs == actual.regs).all()
    assert (wanted == given_).all()
    assert (expected.q == decider(port)(state, held)).all()


@given(charge_ports(1), st.integers(0, 99))
@settings(max_examples=8)  # each one tabulates 2 x 65 536 states
def test_tables_of_one_copy_are_the_step(port: Port, seed: int) -> None:
    _same(port, *_states(port, seed))


@given(charge_ports(2), st.integers(0, 99))
@settings(max_examples=40)
def test_gathers_of_two_copies_are_the_step(port: Port, seed: int) -> None:
    _same(port, *_states(port, seed))


@given(charge_ports(2), st.integers(0, 99))
@settings(max_examples=20)
def test_copies_stay_within_sixteen_bits(port: Port, seed: int) -> None:
    """Ten ticks of the reference from any state leave every copy in 0..65535."""
    state, held = _states(port, seed, 100)
    for _ in range(10):
        state, _ = step(port, state, held)
        assert ((state.regs >= 0) & (state.regs <= U16)).all()


@given(charge_ports(1), st.integers(0, 99))
@settings(max_examples=20)
def test_idle_means_that_nothing_changes_any_more(port: Port, seed: int) -> None:
    state, held = _states(port, seed, 100)
    state, first = step(port, state, held)
    rests = idle(port, state, held)
    for _ in range(5):
        after, out = step(port, state, held)
        assert (after.regs == state.regs)[rests].all()
        assert (out == first)[rests].all()
        state = after


def test_a_count_port_is_stepped_by_the_step() -> None:
    toggle = Toggle(0, (20, 11), (5, 4), (2, 3))
    machine = Count(((0, 0), (1, 1)), (True, True), (3,), (2,), toggle)
    port = _port(machine, 1, ((0, 0), (1, 1)))
    held = np.random.default_rng(1).integers(0, 2, (50, 300)).repeat(2, axis=1)
    state, out = start(port, 50), np.empty(held.shape, np.uint8)
    for tick in range(held.shape[1]):
        state, out[:, tick] = stepper(port)(state, held[:, tick])
    assert (run(port, held) == out).all()
    assert (out == 1).any()


def test_the_comparison_sees_one_wrong_number() -> None:
    """A rate that is off by one 65 536th shows within the states that are compared."""
    modes = tuple(ChargeMode((), (Move("multiply", 60000, rate=rate),)) for rate in (500, 501))
    ports = [
        _port(Charge(("a",), (0.0,), (1e-4,), (0,), ((mode,) * 2,) * 2), 1, ((0, 0), (1, 1)))
        for mode in modes
    ]
    state, held = _states(ports[0], 0)
    assert (step(ports[0], state, held)[0].regs != stepper(ports[1])(state, held)[0].regs).any()
