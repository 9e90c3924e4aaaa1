"""The proof: closure, sequences, ledger, and one verdict."""

import dataclasses
from typing import Literal

from porter.behaviour.model import Behaviour
from porter.circuit.engine import Engine
from porter.parity.closure import Walk, open_walk, walk_one
from porter.parity.closure_cells import walk_many
from porter.parity.closure_more import walk_count, walk_plain
from porter.parity.family import PortMachine, check_family, lengths
from porter.parity.ledger import ledger
from porter.parity.model import Closure, FamilyCheck, LedgerRow, Parity
from porter.parity.outputs import check_answers
from porter.parity.sequences import Enumerated, enumerate_all
from porter.port.memory import Memory, memory
from porter.port.model import Charge, Port
from porter.spec.model import Circuit


def prove(circuit: Circuit, port: Port, behaviour: Behaviour | None = None) -> Parity:
    """Prove or refute that a port does what a circuit does.

    Args:
        behaviour: what `derive` found; derived here where it isn't given.

    Returns:
        The verdict: ``same`` (no exception at all), ``within`` (differences only where a deciding
        voltage is within the stated bound, or accepted by the spec), or ``differs``.
    """
    if behaviour is None:
        from porter.behaviour.derive import derive

        behaviour = derive(circuit)
    mem = memory(Engine(circuit))
    ends = _clocks(circuit, port, mem)
    walk, others = close(circuit, behaviour, port, mem, ends)
    clocks = tuple(zip(ends, others, strict=False))
    machine = PortMachine(port)
    walk = check_answers(mem.engine, port, walk, int(lengths(behaviour, machine)[-1]))
    listed = enumerate_all(circuit, behaviour, port, mem, walk)
    units = check_family(circuit, behaviour, machine, start_q=port.start_q)
    rows = ledger(circuit, behaviour, port, mem)
    witness = _shorter(_shorter(walk.path, listed.witness), units.witness)
    if witness is None and any(
        r.row == "power-on" and r.verdict == "differs" and not r.accepted for r in rows
    ):
        witness = (0,)  # nothing need be pressed
    closure = dataclasses.replace(walk.closure, spread_s=2 * half_spread(behaviour) or None)
    verdict, statement = _verdict(walk, listed, units, rows, clocks)
    return Parity(
        verdict=verdict,
        style=port.style,
        tick_s=port.tick_s,
        closure=closure,
        sequences=listed.sequences,
        ledger=rows,
        counterexample=None if witness is None else changes(witness, port),
        statement=statement,
        family=units,
        clocks=clocks,
    )


def _clocks(circuit: Circuit, port: Port, mem: Memory) -> tuple[float, ...]:
    """The ends of the clock's tolerance, where they make a difference."""
    if not mem.kept or not isinstance(port.machine, Charge) or not circuit.port.clock:
        return ()
    return (1 - circuit.port.clock, 1 + circuit.port.clock)


def close(
    circuit: Circuit, behaviour: Behaviour, port: Port, mem: Memory, clocks: tuple[float, ...] = ()
) -> tuple[Walk, tuple[Closure, ...]]:
    """Walk every reachable state, in the way that fits the port and its memory, and again with other clocks."""
    if not mem.kept:
        return walk_plain(mem, port), ()
    if isinstance(port.machine, Charge):
        if len(mem.kept) == 1:
            return walk_one(mem, port, clocks)
        return walk_many(mem, port), tuple(walk_many(mem, port, clock).closure for clock in clocks)
    if len(mem.kept) == 1:
        return walk_count(circuit, behaviour, mem, port), ()
    said = "counters beside several capacitors are not walked: what is said rests on sequences and units"
    return open_walk(said), ()


def half_spread(behaviour: Behaviour) -> float:
    """Half the narrowest spread that allowed units have in any window, seconds (0: no window)."""
    widths = [
        w.guaranteed.most - w.guaranteed.least
        for w in behaviour.windows
        if w.guaranteed.most is not None and w.guaranteed.least is not None and w.guaranteed.nominal
    ]
    return 0.5 * min(widths, default=0.0)


def _shorter(one: tuple[int, ...] | None, other: tuple[int, ...] | None) -> tuple[int, ...] | None:
    found = [w for w in (one, other) if w is not None]
    return min(found, key=len) if found else None


def changes(witness: tuple[int, ...], port: Port) -> tuple[tuple[int, tuple[str, ...]], ...]:
    """Write held masks per tick as changes: (tick, names held from then on); the last one is the deciding tick."""
    out = []
    for tick, mask in enumerate(witness):
        if tick == 0 or mask != witness[tick - 1]:
            out.append((tick, tuple(n for i, n in enumerate(port.buttons) if mask >> i & 1)))
    if out[-1][0] < len(witness) - 1:  # an edge that comes, or doesn't, while nothing is touched
        out.append((len(witness) - 1, out[-1][1]))
    return tuple(out)


def _verdict(
    walk: Walk,
    listed: Enumerated,
    units: FamilyCheck,
    rows: tuple[LedgerRow, ...],
    clocks: tuple[tuple[float, Closure], ...],
) -> tuple[Literal["same", "within", "differs"], str]:
    open_rows = [r.row for r in rows if r.verdict == "differs" and r.accepted is None]
    taken = [r.row for r in rows if r.accepted is not None]
    if walk.closure.differs or listed.sequences.differences:
        return "differs", "differs: there is a press sequence that circuit and port answer differently"
    if any(c.differs for _, c in clocks):
        return "differs", "differs: with the clock at the end of its tolerance port and circuit part"
    if units.violations:
        return (
            "differs",
            "differs: there is a press sequence that every allowed unit answers alike and the port doesn't",
        )
    if open_rows:
        return "differs", f"differs: not accepted by the spec: {', '.join(open_rows)}"
    deviations = f" with {len(taken)} accepted deviation{'s' if len(taken) != 1 else ''}" if taken else ""
    exact = not walk.closure.grey and walk.closure.complete
    tried = "" if walk.closure.complete else ", as far as tried: not proved for sequences of every length"
    return ("same" if exact and not taken else "within"), f"same{deviations}{tried}"
