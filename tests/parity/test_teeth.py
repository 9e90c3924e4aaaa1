"""Every wrong port of the library is refuted, by a short sequence after which circuit and port really part."""

from functools import cache
from itertools import pairwise

import numpy as np
import pytest
from wrong_ports import SPECS, Right, Wrong, right, wrong_constants, wrong_machines, wrong_ports

import porter
from porter.parity.family import PortMachine, Stage, check_family, set_stages
from porter.parity.model import Parity
from porter.parity.prove import prove
from porter.port.model import Port
from porter.port.plan import answers
from porter.single_run import simulate
from porter.spec.read import read_text

MOST_CHANGES = 10


@cache
def stages(spec: str) -> tuple[Stage, ...]:
    """What the family of a shipped circuit does; the same for all ports held against it."""
    given = right(spec)
    return set_stages(given.circuit, given.behaviour, PortMachine(given.port), start_q=given.port.start_q)


def runs(masks: tuple[int, ...]) -> list[tuple[int, int]]:
    """Write masks per tick as (first tick, mask)."""
    return [(0, masks[0]), *((i + 1, b) for i, (a, b) in enumerate(pairwise(masks)) if a != b)]


def parted(given: Right, machine: object, masks: tuple[int, ...]) -> bool:
    """Run the nominal circuit and a machine through held masks and some ticks more.

    True where their outputs are apart for three ticks of eight, which no sampling delay explains, or
    one has turned more often than the other.
    """
    masks = (*masks, *masks[-1:] * (12 + len(masks) // 20))
    circuit, tick_s = given.circuit, given.port.tick_s
    names = [b.name for b in circuit.buttons]
    schedule = [(t * tick_s, [n for i, n in enumerate(names) if m >> i & 1]) for t, m in runs(masks)]
    level = ("low", "high")[machine.start_q]
    run = simulate(circuit, schedule, len(masks) * tick_s, output=level, engine=given.mem.engine)
    when, to = np.array(run.edges).T
    at = np.arange(len(masks)) * tick_s
    latch = to[np.searchsorted(when, at + 1e-9, side="right") - 1].astype(int)
    table, own = answers(given.mem.engine), getattr(machine, "port", given.port).answer
    state, apart, seen = machine.begin(1), [], []
    for q, mask in zip(latch, masks, strict=True):
        state, shown = machine.step(state, np.array([mask]))
        seen.append(int(shown[0]))
        apart.append(seen[-1] != q or table[q][mask] != own[seen[-1]][mask])
    edges = [int(np.abs(np.diff(levels)).sum()) for levels in (latch, seen)]
    return bool((np.convolve(apart, np.ones(8)) > 2.5).any()) or edges[0] != edges[1]


def check_short(given: Right, machine: object, masks: tuple[int, ...] | None) -> None:
    """The counterexample is one that a person can do, and it is one."""
    assert masks is not None
    assert len(runs(masks)) <= MOST_CHANGES
    assert parted(given, machine, masks)


def masks_of(parity: Parity, port: Port) -> tuple[int, ...]:
    """Return a proof's counterexample as masks per tick, its deciding tick last."""
    assert parity.counterexample is not None
    bit = {name: 1 << i for i, name in enumerate(port.buttons)}
    at = [(tick, sum(bit[n] for n in held)) for tick, held in parity.counterexample]
    out = [m for (a, m), (b, _) in pairwise(at) for _ in range(b - a)]
    return (*out, at[-1][1])


QUICK = {
    "edge instead of level": {"kiln_vent", "soap_dose", "bench_fan"},
    "re-arm restarted by every closure": {"aquarium_light"},
    "open counter wraps at 8 bits": set(),
    "open counter wraps at 16 bits": set(),
    "held counter wraps at 8 bits": {"aquarium_light"},
    "held counter wraps at 16 bits": set(),
    "waits first": {"kiln_vent", "aquarium_light"},
    "shown the wrong way round": {"soap_dose"},
}
QUICK_PORTS = {
    "table entry q0 h1 flipped": {"kiln_vent"},
    "priority swapped": {"kiln_vent"},
    "wrong polarity": {"kiln_vent"},
    "one answer wrong": {"kiln_vent"},
    "waits for 5 ticks of a press": {"kiln_vent"},
    "one re-arm time for both directions": {"uneven"},
}


def marked(wrong: Wrong, quick: set[str]) -> object:
    """Run one circuit for each fault always, the others on request."""
    return pytest.param(wrong, id=str(wrong), marks=() if wrong.spec in quick else pytest.mark.long)


@pytest.mark.parametrize(
    "wrong", [marked(w, QUICK.get(w.fault, {"aquarium_light"})) for w in wrong_machines()]
)
def test_a_wrong_machine_is_refuted(wrong):
    """Machines that no port could be leave the family's bands."""
    given = right(wrong.spec)
    machine = wrong.make(given)
    found = check_family(
        given.circuit, given.behaviour, machine, start_q=given.port.start_q, stages=stages(wrong.spec)
    )
    assert found.violations
    check_short(given, machine, found.witness)


@pytest.mark.parametrize("wrong", [marked(w, QUICK_PORTS.get(w.fault, set())) for w in wrong_ports()])
def test_a_wrong_port_is_refuted(wrong):
    """`prove` says that it differs, and shows how."""
    given = right(wrong.spec)
    port = wrong.make(given)
    parity = prove(given.circuit, port, given.behaviour)
    assert parity.verdict == "differs"
    assert (
        "power-on" in parity.statement
        or parity.closure.differs
        or parity.sequences.differences
        or parity.family.violations
    )
    if (
        wrong.fault != "starts the other way"
    ):  # the ledger's finding: the circuit is run from the port's start
        check_short(given, PortMachine(port), masks_of(parity, port))


@pytest.mark.long
@pytest.mark.parametrize("spec", ["uneven", "soap_dose"])
def test_each_constant_counts(spec):
    """A port with one constant moved by more than the family's spread is refuted."""
    given, missed = right(spec), []
    for wrong in wrong_constants(spec):
        port = wrong.make(given)
        parity = prove(given.circuit, port, given.behaviour)
        if not (parity.closure.differs or parity.sequences.differences or parity.family.violations):
            missed.append(wrong.fault)
            continue
        check_short(given, PortMachine(port), masks_of(parity, port))
    assert not missed


@pytest.mark.parametrize("spec", ["kiln_vent", "uneven"])
def test_the_right_port_is_not_refuted(spec):
    """The checks that refute the wrong ones pass the right one."""
    given = right(spec)
    found = check_family(
        given.circuit,
        given.behaviour,
        PortMachine(given.port),
        start_q=given.port.start_q,
        stages=stages(spec),
    )
    assert not found.violations
    assert found.always > 100


SHIPPED = sorted(p.stem for p in SPECS.glob("*.yaml") if "faulty" not in p.stem)


@pytest.mark.long
@pytest.mark.parametrize("clock", ["as drawn", "±1%", "±10%"])
@pytest.mark.parametrize("spec", SHIPPED)
def test_no_false_alarm(spec, clock):
    """Shipped circuits are proved, with the controller's clock off by up to a tenth too."""
    given = right(spec)
    text = given.circuit.source
    if clock != "as drawn":
        line = next(row for row in text.splitlines() if row.strip().startswith("clock:"))
        text = text.replace(line, f"  clock: {clock}")
    circuit = read_text(text, f"{spec}.yaml")
    behaviour = porter.derive(circuit)
    parity = prove(circuit, porter.plan(circuit, behaviour), behaviour)
    assert not parity.closure.differs
    assert not parity.sequences.differences
    assert not parity.family.violations
    if clock != "±10%":  # windows of a fixed length may move out of the family's with such a clock
        assert parity.verdict in ("same", "within")
