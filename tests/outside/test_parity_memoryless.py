"""Circuits without memory: the proof's verdict against an automata library and an SMT solver.

automata-lib (``DFA ==`` is language equality) and Z3 know nothing of porter: circuit and
port are told to them as tables of (latch, held) -> latch, the circuit's from the exact
engine, and the question is theirs to answer.
"""

from dataclasses import replace
from itertools import product

import numpy as np
import pytest
import z3
from automata.fa.dfa import DFA

import porter
from porter.circuit.engine import Engine
from porter.parity.closure_more import walk_plain
from porter.parity.twin import circuit_decides
from porter.port.memory import memory
from porter.port.model import Count, Port, State
from porter.port.step import step
from porter.resources import resource

SPECS = ("kiln_vent", "door_sign", "cellar_pump", "plant_mister")
Table = dict[tuple[int, int], int]


def planned(name: str):
    """Return a shipped circuit without memory, and its port."""
    circuit = porter.read(str(resource(f"specs/{name}.yaml")))
    return circuit, porter.plan(circuit, porter.derive(circuit))


def circuit_table(circuit) -> Table:
    """Return the exact engine's latch after deciding, by (latch, held)."""
    mem = memory(Engine(circuit))
    keys = list(product((0, 1), range(1 << len(circuit.buttons))))
    q, held = np.array(keys).T
    decided = circuit_decides(mem, q, held, np.zeros((len(keys), len(mem.kept)))).q
    return dict(zip(keys, decided.tolist(), strict=True))


def port_table(port: Port) -> Table:
    """Return the reference step's latch after deciding, by (latch, held); only where nothing else is kept."""
    out = {}
    for q, held in product((0, 1), range(port.held_count)):
        down = held if isinstance(port.machine, Count) else 0
        regs = np.zeros((1, len(port.buttons) + 2), np.int64)
        after, _ = step(port, State(np.array([q], np.uint8), regs), np.array([held]))
        assert int(after.regs[0, len(port.buttons)]) == down
        out[q, held] = int(after.q[0])
    return out


def language(table: Table, start: int) -> DFA:
    """The words of (held, latch) letters that a machine can say; -1 is where it has said something wrong."""
    letters = {f"{h}{q}" for h in {h for _, h in table} for q in (0, 1)}
    moves = {
        q: {a: (int(a[-1]) if table[q, int(a[:-1])] == int(a[-1]) else -1) for a in letters} for q in (0, 1)
    }
    return DFA(
        states={0, 1, -1},
        input_symbols=letters,
        transitions={**moves, -1: dict.fromkeys(letters, -1)},
        initial_state=start,
        final_states={0, 1},
    )


def same_by_induction(one: Table, other: Table, start: int) -> bool:
    """Ask Z3: equal at the start, and no step from equal latches leads to different ones."""
    latch, held = z3.Bool("latch"), z3.Int("held")

    def value(table: Table) -> z3.BoolRef:
        return z3.Or([z3.And(latch == bool(q), held == h) for (q, h), to in table.items() if to])

    solver = z3.Solver()
    solver.add(held >= 0, held <= max(h for _, h in one), value(one) != value(other))
    return bool(solver.check() == z3.unsat) and start in (0, 1)


def same_to_depth(one: Table, other: Table, start: int, depth: int) -> bool:
    """Ask Z3 for a sequence of *depth* held masks after which the two have been apart."""
    most = max(h for _, h in one)
    solver, a, b, apart = z3.Solver(), z3.BoolVal(bool(start)), z3.BoolVal(bool(start)), []
    for k in range(depth):
        held = z3.Int(f"held{k}")
        solver.add(held >= 0, held <= most)
        a, b = (
            z3.Or([z3.And(x == bool(q), held == h) for (q, h), to in table.items() if to])
            for x, table in ((a, one), (b, other))
        )
        apart.append(a != b)
    solver.add(z3.Or(apart))
    return bool(solver.check() == z3.unsat)


def judged_same(circuit, port: Port) -> bool:
    """What porter's own walk says."""
    return walk_plain(memory(Engine(circuit)), port).closure.differs == 0


@pytest.mark.parametrize("name", SPECS)
def test_all_three_say_the_same(name):
    """Walk, language equality and solver agree that the port is the circuit."""
    circuit, port = planned(name)
    one, other = circuit_table(circuit), port_table(port)
    left, right = language(one, port.start_q), language(other, port.start_q)
    assert judged_same(circuit, port)
    assert left == right
    assert same_by_induction(one, other, port.start_q)
    assert same_to_depth(one, other, port.start_q, 6)


def test_all_three_refute_every_flipped_entry():
    """Each check can fail: for every flipped entry of the table that can be come to, all say so."""
    circuit, port = planned("kiln_vent")
    one = circuit_table(circuit)
    machine = port.machine
    assert isinstance(machine, Count)
    for q, h in product((0, 1), range(port.held_count)):
        rows = [list(row) for row in machine.table]
        rows[q][h] ^= 1
        wrong = replace(port, machine=replace(machine, table=tuple(map(tuple, rows))))
        other = port_table(wrong)
        left, right = language(one, port.start_q), language(other, port.start_q)
        assert not judged_same(circuit, wrong)
        assert left != right
        assert not same_by_induction(one, other, port.start_q)
        assert not same_to_depth(one, other, port.start_q, 3)
