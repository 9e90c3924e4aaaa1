"""A first look at the evidence, shared by the rules: every settled situation, and the memory buttons."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from porter.behaviour.measure import HIGH, OSCILLATES
from porter.behaviour.rules.evidence import Evidence
from porter.circuit.engine import Engine, Lanes, Mask
from porter.circuit.network import GND, VCC, Branch, Topology
from porter.circuit.values import Columns, Floats
from porter.findings import Position
from porter.spec.model import Circuit, Part

#: A capacitor's terminal that moves less than this part of the supply remembers nothing.
_SWING = 0.02


@dataclass(frozen=True, slots=True)
class Situation:
    """The nominal circuit settled with the latch kept at `q` and `held` pressed.

    Args:
        volts: by node; currents: by branch of the topology, from its first node to its second.
    """

    q: int
    held: int
    volts: Floats
    currents: Floats


@dataclass(frozen=True, slots=True)
class MemoryButton:
    """A button that lays a capacitor charged by the output on a timer input.

    Args:
        index: of the button; store: the capacitor's node; entry: the node on the input's side.
    """

    index: int
    store: int
    entry: int

    @property
    def mask(self) -> int:
        """The held mask of this button alone."""
        return 1 << self.index


@dataclass(frozen=True, slots=True)
class Case:
    """The evidence with what several rules need of it.

    Args:
        situations: by (q, held), of all combinations.
        lasting: those that the nominal circuit stays in, or keeps coming back to.
        memory: the memory buttons; failing: those that do not turn the output both ways.
        by_leak, by_capacitors: failing ones that work without leakage; without what hangs on the inputs.
    """

    evidence: Evidence
    situations: dict[tuple[int, int], Situation]
    lasting: tuple[tuple[int, int], ...]
    memory: tuple[MemoryButton, ...]
    failing: tuple[MemoryButton, ...]
    by_leak: tuple[MemoryButton, ...]
    by_capacitors: tuple[MemoryButton, ...]

    @property
    def circuit(self) -> Circuit:
        """The circuit as drawn."""
        return self.evidence.circuit

    @property
    def topo(self) -> Topology:
        """Its connections."""
        return self.evidence.engine.topo

    @property
    def cols(self) -> Columns:
        """Its values."""
        return self.evidence.engine.columns

    @property
    def supply(self) -> float:
        """The nominal supply, volt."""
        return self.circuit.supply.nominal

    def pin(self, name: str) -> int | None:
        """Return the node of a pin, None where it is not connected."""
        node = self.circuit.timer.pins.get(name)
        return None if node is None else self.topo.node(node)

    def place(self, pin: str) -> Position:
        """Return where a pin is written, or the timer where it is not."""
        return self.circuit.timer.pin_positions.get(pin, self.circuit.timer.position)

    def volts(self, q: int, held: int, node: int) -> float:
        """Return a node's settled voltage."""
        return volts_at(self.situations[q, held].volts, node, self.supply)

    def with_rows(self, rows: Floats) -> Engine:
        """Return the circuit with other values."""
        return Engine(self.circuit, rows, self.cols)

    def part(self, name: str) -> Part | None:
        """Return a part by name."""
        return next((p for p in self.circuit.parts if p.name == name), None)


def volts_at(volts: Floats, node: int, supply: float) -> float:
    """Return the voltage of a node or rail."""
    return supply if node == VCC else 0.0 if node == GND else float(volts[node])


def deciding(evidence: Evidence) -> set[int]:
    """Return the nodes of the trigger and threshold pins."""
    pins, topo = evidence.circuit.timer.pins, evidence.engine.topo
    return {topo.node(pins[pin]) for pin in ("trigger", "threshold") if pin in pins}


def name_of(topo: Topology, node: int) -> str:
    """Return the name of a node or rail."""
    return {VCC: "vcc", GND: "gnd"}.get(node) or topo.nodes[node]


def settle(engine: Engine, q: int, held: int) -> Lanes:
    """Return all units settled with the latch kept at *q* and *held* pressed from the start."""
    lanes = engine.empty(q, None, held)
    engine.run(lanes, np.inf, frozen=True)
    return lanes


def arrived(engine: Engine, q: int, mask: int) -> tuple[Lanes, Mask]:
    """Return all units settled at *q* after a hold of *mask* turned them there, and where that works."""
    lanes, ok = engine.rest(1 - q)
    engine.press(lanes, mask)
    engine.run(lanes, np.inf)
    ok &= ~lanes.busy
    engine.press(lanes, 0)
    engine.run(lanes, np.inf)
    return lanes, ok & (lanes.q == q) & ~lanes.busy


def toggles(engine: Engine, mask: int) -> Mask:
    """Return which units rest both ways and are turned both ways by holds of *mask*, time and again."""
    good = np.ones(len(engine.rows), bool)
    for q in (0, 1):
        lanes, ok = arrived(engine, q, mask)
        engine.press(lanes, mask)
        engine.run(lanes, np.inf)
        good &= ok & engine.rest(q)[1] & (lanes.q == 1 - q) & ~lanes.busy
    return good


def parasitic(branch: Branch) -> bool:
    """True for paths that nobody may lean on: leakage of parts, and the reset pin's own current."""
    return branch.name.endswith(" leak") or branch.name == "reset current"


def leaks(circuit: Circuit) -> list[str]:
    """Return the columns that hold a leakage."""
    found = [f"parts.{p.name}.leak" for p in circuit.parts if p.leak is not None]
    return found + [f"buttons.{b.name}.leak" for b in circuit.buttons if b.leak is not None]


def without_leak(
    case_cols: Columns, circuit: Circuit, rows: Floats, columns: Sequence[str], share: float
) -> Floats:
    """Return rows in which the named leakages let only a *share* of their current through."""
    rows = rows.copy()
    for name in columns:
        part = next((p for p in circuit.parts if name == f"parts.{p.name}.leak"), None)
        is_current = part is not None and part.leak is not None and part.leak.current is not None
        rows[:, case_cols.index(name)] *= share if is_current else 1.0 / share
    return rows


def look(evidence: Evidence) -> Case:
    """Take the first look."""
    situations = _situations(evidence.engine)
    memory = tuple(_memory_buttons(evidence, situations))
    failing = tuple(m for m in memory if not _turns(evidence, m))
    by_leak = _cured(evidence, failing, _leakless(evidence))
    rest = tuple(m for m in failing if m not in by_leak)
    by_capacitors = tuple(m for m in rest if _cured(evidence, (m,), _capless(evidence, m)))
    return Case(evidence, situations, _lasting(evidence), memory, failing, by_leak, by_capacitors)


def _situations(engine: Engine) -> dict[tuple[int, int], Situation]:
    keys = [(q, held) for held in range(1 << len(engine.circuit.buttons)) for q in (0, 1)]
    x = engine.empty(0).x[0]
    lanes = engine.lanes(
        np.zeros(len(keys), np.int64),
        np.array([q for q, _ in keys]),
        np.tile(x, (len(keys), 1)),
        np.array([held for _, held in keys]),
    )
    engine.run(lanes, np.inf, frozen=True)
    volts = engine.volts(lanes)
    conducts = lanes.conducts
    return {
        key: Situation(*key, volts[k], _currents(engine, key, int(conducts[k]), volts[k]))
        for k, key in enumerate(keys)
    }


def _currents(engine: Engine, key: tuple[int, int], conducts: int, volts: Floats) -> Floats:
    supply = float(engine.supply[0])
    out = np.zeros(len(engine.topo.branches))
    for k, b in enumerate(engine.topo.branches):
        if b.fits(*key) and (b.way < 0 or conducts >> b.way & 1):
            emf = 0.0 if b.emf is None else float(b.emf(engine.rows)[0])
            drop = volts_at(volts, b.a, supply) - volts_at(volts, b.b, supply) - emf
            out[k] = drop / float(b.ohm(engine.rows)[0])
    return out


def _lasting(evidence: Evidence) -> tuple[tuple[int, int], ...]:
    found = {(0, 0), (1, 0)}
    for (_, mask), output in evidence.nominal.held.items():
        settled = int(output[0])
        found |= {(q, mask) for q in ((0, 1) if settled == OSCILLATES else (settled,)) if q >= 0}
    if not any(int(o[0]) >= HIGH for o in evidence.nominal.held.values()):
        found.discard((1, 0))  # nothing ever turns it high
    return tuple(sorted(found))


def _memory_buttons(evidence: Evidence, situations: dict[tuple[int, int], Situation]) -> list[MemoryButton]:
    topo, supply = evidence.engine.topo, evidence.circuit.supply.nominal
    inputs = deciding(evidence)
    stores = {node for a, b, _, _ in topo.caps for node in (a, b) if node >= 0}
    swing = np.abs(situations[1, 0].volts - situations[0, 0].volts)
    found = []
    for i, button in enumerate(evidence.circuit.buttons):
        a, b = (topo.node(n) for n in button.nodes)
        for store, entry in ((a, b), (b, a)):
            moves = store in stores - inputs and swing[store] > _SWING * supply
            if button.normally == "open" and moves and _reaches(topo, entry, inputs, evidence):
                found.append(MemoryButton(i, store, entry))
                break
    return found


def _reaches(topo: Topology, start: int, inputs: set[int], evidence: Evidence) -> bool:
    """True where resistors join a node to a timer input, without passing a rail or the output."""
    output = topo.node(evidence.circuit.timer.pins.get("output", "gnd"))
    resistors = {p.name for p in evidence.circuit.parts if p.kind == "resistor"}
    pairs = [(b.a, b.b) for b in topo.branches if b.name in resistors]
    seen, todo = set(), [start]
    while todo:
        node = todo.pop()
        if node < 0 or node == output or node in seen:
            continue
        seen.add(node)
        todo += [y for x, y in (*pairs, *((b, a) for a, b in pairs)) if x == node]
    return bool(seen & inputs)


def _turns(evidence: Evidence, m: MemoryButton) -> bool:
    nominal = evidence.nominal
    at_first = all(nominal.rests[q][0] and nominal.held[q, m.mask][0] == 1 - q for q in (0, 1))
    return at_first and all(np.isfinite(nominal.windows[m.index, q, "re-arm-after-hold"][0]) for q in (0, 1))


def _cured(
    evidence: Evidence, failing: Sequence[MemoryButton], rows: Floats | None
) -> tuple[MemoryButton, ...]:
    if not failing or rows is None:
        return ()
    engine = Engine(evidence.circuit, rows, evidence.engine.columns)
    return tuple(m for m in failing if toggles(engine, m.mask)[0])


def _leakless(evidence: Evidence) -> Floats | None:
    names = leaks(evidence.circuit)
    if not names:
        return None
    return without_leak(evidence.engine.columns, evidence.circuit, evidence.engine.rows, names, 1e-6)


def hanging(evidence: Evidence, m: MemoryButton) -> list[str]:
    """Return the capacitors with an end on a trigger or threshold node, but the memory's own."""
    topo = evidence.engine.topo
    inputs = deciding(evidence)
    near = {m.entry, *inputs} - {m.store, GND, VCC}
    return [name for a, b, _, name in topo.caps if {a, b} & near and m.store not in (a, b)]


def _capless(evidence: Evidence, m: MemoryButton) -> Floats | None:
    names = hanging(evidence, m)
    if not names:
        return None
    rows = evidence.engine.rows.copy()
    rows[:, [evidence.engine.columns.index(f"parts.{n}") for n in names]] *= 1e-6
    return rows
