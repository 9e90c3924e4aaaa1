"""The emitted C and MicroPython do what the reference step does, to the bit."""

from dataclasses import replace
from functools import lru_cache

import numpy as np
import pytest
from emit_ports import HAND_MADE, charge_ports, count_ports, stimulus, suite, toggle_sides
from emit_run import Core, compile_cores, emit_python, micropython, python_core
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st

from porter.emit import emit
from porter.emit.lower import lower
from porter.port import step as reference
from porter.port.model import Charge, Port, State

MANY = settings(
    deadline=None,
    max_examples=2,
    phases=[Phase.generate],
    database=None,
    derandomize=True,
    suppress_health_check=list(HealthCheck),
)
MOST_STATES = 300_000


@pytest.fixture(scope="session")
def cache(tmp_path_factory):
    """Where the compiler keeps what it made, for the session."""
    return tmp_path_factory.mktemp("zig")


def cores(ports: list[Port], where, cache) -> list[tuple[Port, Core]]:
    """Compile ports together, renamed apart."""
    named = [replace(port, name=f"p{i}") for i, port in enumerate(ports)]
    texts = [emit(port, suite(port, 2, 1)) for port in named]
    return list(zip(named, compile_cores(named, texts, where, cache), strict=True))


def walk(port: Port, core: Core) -> int:
    """Step port and core side by side through every pair of states they reach; return how many.

    Two machines that answer alike in all of these answer alike for every sequence of any length.
    """
    ours, theirs = reference.start(port), core.start()
    seen: set[bytes] = set()
    while len(theirs):
        held = np.tile(np.arange(port.held_count), len(theirs))
        ours = State(np.repeat(ours.q, port.held_count), np.repeat(ours.regs, port.held_count, axis=0))
        ours, expected = reference.step(port, ours, held)
        theirs, answers, rest = core.step(np.repeat(theirs, port.held_count), held)
        np.testing.assert_array_equal(expected, answers)
        check_rest(port, ours, held, rest)
        ours, theirs = _new(ours, theirs, seen)
        if len(seen) > MOST_STATES:
            break
    return len(seen)


@lru_cache(maxsize=64)
def _sees_held(port: Port) -> bool:
    """Taking a port apart looks at every state there is: once is enough."""
    return lower(port).sees_held


def check_rest(port: Port, state: State, held: np.ndarray, rest: np.ndarray) -> None:
    """`idle` never says more than is true; with the buttons open, or where it keeps them, it says all."""
    true = reference.idle(port, state, held)
    assert not (rest & ~true).any()
    seen = np.full(len(held), _sees_held(port)) | (held == 0)
    np.testing.assert_array_equal(true[seen], rest[seen])


def _new(ours: State, theirs: np.ndarray, seen: set[bytes]) -> tuple[State, np.ndarray]:
    rows = np.column_stack([ours.q, ours.regs, *(theirs[name] for name in theirs.dtype.names)]).astype(
        np.int32
    )
    keys = [row.tobytes() for row in rows]
    fresh = [i for i, key in enumerate(keys) if key not in seen and not seen.add(key)]
    return State(ours.q[fresh], ours.regs[fresh]), theirs[fresh]


def follow(port: Port, core: Core, ticks: int) -> None:
    """Compare answers and `idle` along many random sequences."""
    lanes = 64
    held = np.stack([stimulus(port, ticks, seed) for seed in range(lanes)])
    ours, theirs = reference.start(port, lanes), np.repeat(core.start(), lanes)
    for tick in range(ticks):
        ours, expected = reference.step(port, ours, held[:, tick])
        theirs, answers, rest = core.step(theirs, held[:, tick])
        np.testing.assert_array_equal(expected, answers)
        check_rest(port, ours, held[:, tick], rest)


def test_hand_made_ports_are_the_same_in_every_state(tmp_path, cache):
    """C equals the reference in all reachable states, and `idle` is true exactly where nothing changes."""
    for port, core in cores([make() for make in HAND_MADE], tmp_path, cache):
        follow(port, core, 300)
        if not isinstance(port.machine, Charge):
            assert walk(port, core) > 1


class Batch(list):
    """Ports to compile together; without a long repr."""

    def __repr__(self) -> str:
        return f"<{len(self)} ports>"


PORTS = st.one_of(count_ports(), charge_ports(1), charge_ports(3))


@MANY
@given(batch=st.lists(PORTS, min_size=16, max_size=16).map(Batch))
def test_any_port_is_the_same_over_long_sequences(batch, tmp_path_factory, cache):
    """C equals the reference for random ports of both styles with every kind of move."""
    for port, core in cores(batch, tmp_path_factory.mktemp("any"), cache):
        follow(port, core, 120)


def test_any_state_comes_back(tmp_path, cache):
    """From any bit pattern a count core is back in a state that it can reach, with the buttons open."""
    made = [make() for make in HAND_MADE if not isinstance(make().machine, Charge)]
    for port, core in cores(made, tmp_path, cache):
        random = np.random.default_rng(5)
        states = np.frombuffer(random.bytes(512 * core.kinds.itemsize), core.kinds)
        ever = _reachable(port, core)
        for _ in range(256):
            states, answers, _ = core.step(states, np.zeros(len(states), np.uint8))
            assert {*answers.tolist()} <= {port.answer[0][0], port.answer[1][0]}
        assert {state.tobytes() for state in states} <= ever


def _reachable(port: Port, core: Core) -> set[bytes]:
    states, ever = core.start(), set()
    while len(states):
        states = np.repeat(states, port.held_count)
        states, _, _ = core.step(states, np.tile(np.arange(port.held_count), len(states) // port.held_count))
        states = states[
            [i for i, s in enumerate(states) if s.tobytes() not in ever and not ever.add(s.tobytes())]
        ]
    return ever


def test_a_wrong_constant_is_found(tmp_path, cache):
    """The comparison fails on a core whose re-arm time is one tick off."""
    port = toggle_sides()
    texts = emit(port, suite(port, 2, 1))
    path = f"firmware/c/{port.name}.c"
    wrong = texts | {path: texts[path].replace("TAP_HIGH 31u", "TAP_HIGH 30u")}
    assert wrong != texts
    core = compile_cores([port], [wrong], tmp_path, cache)[0]
    with pytest.raises(AssertionError):
        walk(port, core)


@settings(deadline=None, max_examples=15)
@given(port=PORTS)
def test_python_is_the_same(port):
    """The MicroPython core, run here, equals the reference, and so does its `idle`."""
    latch, state = python_core(port)(), reference.start(port)
    for held in stimulus(port, 200, 7):
        now = np.array([held])
        state, expected = reference.step(port, state, now)
        assert int(expected[0]) == latch.step(int(held))
        check_rest(port, state, now, np.array([bool(latch.idle())]))


def test_micropython_runs_without_the_heap():
    """In MicroPython itself the answers are the reference's, with the heap locked during each step."""
    ports = [make() for make in HAND_MADE]
    held = [stimulus(port, 400, 3) for port in ports]
    expected = [
        bytes(reference.run(port, h[None, :])[0].tolist()) for port, h in zip(ports, held, strict=True)
    ]
    # One interpreter for all, since its start is what costs; each script with names of its own.
    scripts = (f"exec({_drive(p, bytes(h.tolist()))!r}, {{}})" for p, h in zip(ports, held, strict=True))
    assert [f"bytearray({e!r})" for e in expected] == micropython("\n".join(scripts)).splitlines()


def _drive(port: Port, held: bytes) -> str:
    # In a function: at the top level the loop's variable itself may take memory.
    return f"""
{emit_python(port)}
import micropython

def go(latch, held, out):
    micropython.heap_lock()
    for i in range(len(held)):
        out[i] = latch.step(held[i])
        latch.idle()
    micropython.heap_unlock()
    print(out)

go({python_core(port).__name__}(), {held!r}, bytearray({len(held)}))
"""
