"""The proof: closure, sequences, ledger, and one verdict."""

from porter.behaviour.model import Behaviour
from porter.circuit.engine import Engine
from porter.parity.closure import Walk, walk_one
from porter.parity.closure_more import walk_count, walk_many, walk_plain
from porter.parity.ledger import ledger
from porter.parity.model import LedgerRow, Parity
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
    walk = close(circuit, behaviour, port, mem)
    listed = enumerate_all(circuit, behaviour, port, mem, walk)
    rows = ledger(circuit, behaviour, port, mem)
    witness = _shorter(walk.path, listed.witness)
    verdict, statement = _verdict(walk, listed, rows)
    return Parity(
        verdict=verdict,  # type: ignore[arg-type]
        style=port.style,
        tick_s=port.tick_s,
        closure=walk.closure,
        sequences=listed.sequences,
        ledger=rows,
        counterexample=None if witness is None else changes(witness, port),
        statement=statement,
    )


def close(circuit: Circuit, behaviour: Behaviour, port: Port, mem: Memory) -> Walk:
    """Walk every reachable state, in the way that fits the port and its memory."""
    if not mem.kept:
        return walk_plain(mem, port)
    if isinstance(port.machine, Charge):
        return walk_one(mem, port) if len(mem.kept) == 1 else walk_many(mem, port)
    return walk_count(mem, port, half_spread(behaviour))


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
    return tuple(out)


def _verdict(walk: Walk, listed: Enumerated, rows: tuple[LedgerRow, ...]) -> tuple[str, str]:
    open_rows = [r.row for r in rows if r.verdict == "differs" and r.accepted is None]
    taken = [r.row for r in rows if r.accepted is not None]
    if walk.closure.differs or listed.sequences.differences:
        return "differs", "differs: there is a press sequence that circuit and port answer differently"
    if open_rows:
        return "differs", f"differs: not accepted by the spec: {', '.join(open_rows)}"
    deviations = f" with {len(taken)} accepted deviation{'s' if len(taken) != 1 else ''}" if taken else ""
    exact = not walk.closure.grey and walk.closure.complete
    return ("same" if exact and not taken else "within"), f"same{deviations}"
