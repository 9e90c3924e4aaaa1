"""What the walk proved about a toggle, against brute force: the exact engine along very many presses.

Nothing of the proof is used here but its two claims, the bound and the places of the
decisions: away from those the outputs agree at every tick, and no copy is ever
further from its voltage than the bound.
"""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

import porter
from porter.circuit.engine import Engine
from porter.parity.closure import Walk, walk_one
from porter.parity.twin import Twin
from porter.port.memory import Memory, memory
from porter.port.model import Charge, Port
from porter.resources import resource


@cache
def toggle(name: str = "aquarium_light"):
    """Return circuit, charge port, memory and walk of a shipped toggle."""
    circuit = porter.read(str(resource(f"specs/{name}.yaml")))
    behaviour = porter.derive(circuit)
    mem = memory(Engine(circuit))
    circuit = replace(circuit, port=replace(circuit.port, style="charge"))
    port = porter.plan(circuit, behaviour)
    walk, _ = walk_one(mem, port)
    return circuit, behaviour, port, mem, walk


def lengths(behaviour, port: Port) -> np.ndarray:
    """Return lengths in ticks at, just below and just above every edge of every window's bands."""
    ends = {
        end / port.tick_s
        for w in behaviour.windows
        for band in (w.seconds, w.guaranteed)
        for end in (band.least, band.nominal, band.most)
        if end
    }
    beside = {max(1, round(end) + by) for end in ends for by in (-2, -1, 0, 1, 2)}
    return np.array(sorted(beside | {1, 2, 3, 5, 20, 400}))


def near(walk: Walk, twin: Twin, held: np.ndarray, masks: int) -> np.ndarray:
    """Return which lanes are about to decide within the bound of a level."""
    X, at = twin.state.regs[:, 0], twin.state.q.astype(np.int64) * masks + held
    out = np.zeros(len(held), bool)
    for (q, h), edges in walk.edges.items():
        for edge in edges:
            out |= (at == q * masks + h) & (np.abs(X - edge) <= walk.bound + 0.5)
    return out


def brute(
    circuit,
    port: Port,
    mem: Memory,
    walk: Walk,
    stretches: np.ndarray,
    presses: int,
    lanes: int,
    seed: int = 5,
):
    """Run lanes of presses and gaps; returns presses made, violations, and the most that a copy was off.

    A lane that came near to a level starts anew, since nothing is promised from there on.
    """
    rng = np.random.default_rng(seed)
    fresh = Twin.powered(circuit, port, mem.engine, lanes)
    twin = fresh.take(np.arange(lanes))
    held, left = np.zeros(lanes, np.int64), np.zeros(lanes, np.int64)
    made, wrong, worst = 0, 0, 0.0
    while made < presses:
        new = left <= 0
        held = np.where(new, np.where(held > 0, 0, rng.integers(1, port.held_count, lanes)), held)
        drawn = np.where(rng.random(lanes) < 0.7, rng.choice(stretches, lanes), rng.integers(1, 90, lanes))
        left = np.where(new, drawn, left) - 1
        made += int((new & (held > 0)).sum())
        grey = near(walk, twin, held, port.held_count)
        decided, shown = twin.tick(held)
        wrong += int(((decided != shown) & ~grey).sum())
        off = np.abs(mem.copies(twin.lanes.x)[:, 0] - twin.state.regs[:, 0])
        lost = grey | (decided != shown)
        worst = max(worst, float(off[~lost].max(initial=0.0)))
        twin.lanes.put(lost, fresh.lanes.take(lost))
        twin.state.q[lost], twin.state.regs[lost] = fresh.state.q[lost], fresh.state.regs[lost]
    return made, wrong, worst


def check(name: str, presses: int, lanes: int) -> None:
    """Run a toggle's port and compare with what was proved."""
    circuit, behaviour, port, mem, walk = toggle(name)
    made, wrong, worst = brute(circuit, port, mem, walk, lengths(behaviour, port), presses, lanes)
    assert made >= presses
    assert wrong == 0
    assert walk.closure.bound_v is not None
    assert worst * mem.scale_v[0] <= walk.closure.bound_v


def test_no_violation_in_a_few_presses():
    """Fifteen hundred presses find nothing."""
    check("aquarium_light", 1_500, 256)


@pytest.mark.long
@pytest.mark.parametrize(
    ("name", "presses"), [("aquarium_light", 2_000_000), ("map_lamp", 500_000), ("bench_fan", 500_000)]
)
def test_no_violation_in_millions_of_presses(name, presses):
    """Three million presses, timed at the edges of every band and at random, find nothing."""
    check(name, presses, 8192)


def test_a_wrong_port_is_found():
    """The check can fail: a limit moved by ten bounds shows."""
    circuit, behaviour, port, mem, walk = toggle()
    machine = port.machine
    assert isinstance(machine, Charge)
    mode = machine.modes[0][1]
    moved = replace(mode, flips=(replace(mode.flips[0], limit=mode.flips[0].limit + round(10 * walk.bound)),))
    low = (machine.modes[0][0], moved)
    wrong_port = replace(port, machine=replace(machine, modes=(low, machine.modes[1])))
    _, wrong, _ = brute(circuit, wrong_port, mem, walk, lengths(behaviour, port), 800, 256)
    assert wrong > 0


def test_a_port_of_another_pace_breaks_the_bound():
    """The check can fail: copies of a port that moves a fiftieth too fast leave the bound of the right one."""
    circuit, behaviour, port, mem, walk = toggle()
    machine = port.machine
    assert isinstance(machine, Charge)

    def quicker(mode):
        return replace(
            mode, moves=tuple(replace(m, rate=m.rate - (65536 - m.rate) // 50) for m in mode.moves)
        )

    modes = tuple(tuple(quicker(mode) for mode in row) for row in machine.modes)
    wrong_port = replace(port, machine=replace(machine, modes=modes))
    _, _, worst = brute(circuit, wrong_port, mem, walk, lengths(behaviour, port), 800, 256)
    assert worst > walk.bound
