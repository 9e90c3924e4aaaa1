"""The walk's own promises: the bound holds along real runs, and each hole that a bound could have is shut."""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from wrong_ports import charge, right, with_modes

import porter
from porter.circuit.engine import Engine
from porter.parity.closure import walk_one
from porter.parity.closure_cells import walk_many
from porter.parity.twin import Twin, circuit_decides
from porter.port.memory import memory
from porter.port.model import U16
from porter.port.plan import plan
from porter.spec.read import read_text


@cache
def worst_error(name: str, seed: int, ticks: int, lanes: int = 64) -> tuple[float, float]:
    """Return the most that a copy is off along random runs without a grey decision, and the bound, in copies."""
    given = right(name)
    walk, _ = walk_one(given.mem, given.port)
    rng = np.random.default_rng(seed)
    twin = Twin.powered(given.circuit, given.port, given.mem.engine, lanes)
    held, left = np.zeros(lanes, np.int64), np.zeros(lanes, np.int64)
    lost, worst = np.zeros(lanes, bool), 0.0
    for _ in range(ticks):
        new = left <= 0
        held = np.where(new, rng.integers(0, given.port.held_count, lanes), held)
        left = np.where(new, np.exp(rng.uniform(0, 5.5, lanes)).astype(np.int64), left) - 1
        decided, shown = twin.tick(held)
        lost |= decided != shown  # from a grey decision on nothing is promised
        off = np.abs(given.mem.copies(twin.lanes.x)[:, 0] - twin.state.regs[:, 0])
        worst = max(worst, float(off[~lost].max(initial=0.0)))
    assert not lost.all()
    return worst, walk.bound


@pytest.mark.parametrize("name", ["aquarium_light", pytest.param("map_lamp", marks=pytest.mark.long)])
def test_the_copy_stays_within_the_bound(name):
    """Along random presses the true voltage is never further away than promised, and gets near to that."""
    worst, bound = worst_error(name, 11, 700)
    assert worst <= bound
    assert worst > bound / 30


def test_a_bound_made_smaller_would_be_broken():
    """The comparison can fail: a twentieth of the bound does not hold."""
    worst, bound = worst_error("aquarium_light", 11, 700)
    assert worst > bound / 20


def test_a_drift_away_from_where_nothing_moves_is_no_bound():
    """Beside the level that a one-way output drives to, a port that creeps away from it has no bound."""
    given = right("map_lamp")
    walk, _ = walk_one(given.mem, given.port)
    assert walk.closure.complete

    def creeping(q: int, h: int) -> object:
        mode = charge(given.port).modes[q][h]
        if (q, h) != (0, 0):
            return mode
        return replace(mode, moves=(replace(mode.moves[0], add=mode.moves[0].add + 3),))

    port = with_modes(given.port, creeping)
    port = replace(port, machine=replace(charge(port), start=(200,)))  # where it creeps
    wrong, _ = walk_one(given.mem, port)
    assert not wrong.closure.complete
    assert any("no bound" in said for said in wrong.closure.said)


def test_a_press_in_the_tick_of_a_timed_end_is_grey():
    """A one-shot that ends and is pressed again within one tick starts anew, while the port goes on: counted as grey."""
    given = right("soap_dose")
    twin = Twin.powered(given.circuit, given.port, given.mem.engine, 1)
    press, none = np.array([1]), np.array([0])
    twin.tick(press)
    ticks = 0
    while twin.lanes.q[0] == twin.state.q[0]:
        twin.tick(none)
        ticks += 1
    # The circuit's pulse is over and the port's isn't yet: press at this very boundary.
    decided, shown = twin.tick(press)
    assert (decided[0], shown[0]) == (1, 1)
    apart = given.mem.copies(twin.lanes.x)[0, 0] - twin.state.regs[0, 0]
    assert abs(apart) > 0.5 * U16
    walk, _ = walk_one(given.mem, given.port)
    assert walk.closure.grey >= 4
    assert any("up to its first grey decision" in said for said in walk.closure.said)


def test_a_narrow_band_of_decisions_is_seen():
    """A limit and a block between two points of the grid: the table is the circuit's, copy by copy."""
    text = right("uneven").circuit.source
    # A divider far down: with the button held, trigger and reset meet at nearly the same memory voltage.
    text = text.replace("reset: vcc", "reset: memory").replace("reset_level", "reset_level")
    circuit = read_text(text, "uneven.yaml")
    mem = memory(Engine(circuit))
    port = plan(circuit, porter.derive(circuit))
    walk, _ = walk_one(mem, port)
    every = np.arange(U16 + 1)[:, None]
    for q in (0, 1):
        for h in range(port.held_count):
            truth = circuit_decides(mem, q, h, every).q
            np.testing.assert_array_equal(np.flatnonzero(np.diff(truth)) + 0.5, walk.edges[q, h])


@settings(max_examples=2, suppress_health_check=list(HealthCheck))
@given(data=st.data())
def test_a_moved_limit_of_two_copies_is_wrong_or_within_the_bound(data):
    """For several capacitors: a test moved by more than the bound is never taken for grey."""
    given = right("wash_door")
    machine = charge(given.port)
    q, h = data.draw(st.sampled_from([(0, 0), (0, 1), (0, 2), (0, 3), (1, 1), (1, 2)]))
    group = data.draw(
        st.sampled_from([g for g in (("flips", "blocks"), ("force",))[q] if getattr(machine.modes[q][h], g)])
    )
    by = data.draw(st.sampled_from([-1, 1])) * data.draw(st.integers(1500, 9000))

    def moved(a: int, b: int) -> object:
        mode = machine.modes[a][b]
        if (a, b) != (q, h):
            return mode
        tests = tuple(replace(t, limit=t.limit + by) for t in getattr(mode, group))
        return replace(mode, **{group: tests})

    walk = walk_many(given.mem, with_modes(given.port, moved))
    assert walk.closure.bound_v is not None
    assert walk.closure.differs > 0


def test_the_unmoved_limits_of_two_copies_are_right():
    """The check above passes the port as planned."""
    given = right("wash_door")
    assert walk_many(given.mem, given.port).closure.differs == 0
