"""Ports that are wrong in ways that ports are wrong, for `porter prove` to refute.

Where a `Port` can say the fault it is one; where it can't, it is a `Wrapped`: the right
port with something wrong between the buttons and it.
"""

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path

import numpy as np

from porter.behaviour.derive import derive
from porter.behaviour.model import Behaviour
from porter.circuit.engine import Engine
from porter.parity.family import PortMachine
from porter.port.bench import bench
from porter.port.charge import ALWAYS, plan_charge
from porter.port.memory import Memory, frozen_rest, memory
from porter.port.model import U16, Charge, Count, Move, Port, State, Test
from porter.port.plan import plan
from porter.spec.model import Circuit
from porter.spec.read import read_text

SPECS = Path(__file__).parents[2] / "specs"

#: A toggle whose idle level lies nearer to one threshold: its two re-arm times after a hold are far
#: apart, with parts good enough that no two allowed units come near each other.
UNEVEN = """
circuit: Uneven toggle
supply: 15 V ±1%
timer:
  family: cmos
  pins: {trigger: inputs, threshold: inputs, reset: vcc, output: out}
parts:
  R1: {resistor: 13k ±0.5%, between: [vcc, inputs]}
  R2: {resistor: 9k53 ±0.5%, between: [inputs, gnd]}
  R3: {resistor: 220k ±0.5%, between: [out, memory]}
  C1: {capacitor: 1u ±1%, between: [memory, gnd]}
buttons:
  PUSH: {between: [memory, inputs]}
outputs:
  lamp: {high: out}
port:
  supply: 5 V
  tick: 2 ms
  clock: ±2%
  power_on: low
"""


@dataclass(frozen=True, slots=True)
class Right:
    """A circuit with the port that is planned for it."""

    circuit: Circuit
    behaviour: Behaviour
    port: Port
    mem: Memory


@cache
def right(name: str) -> Right:
    """Return a shipped spec's circuit, or ``uneven``, with its port; one that remembers is a charge port."""
    text = UNEVEN if name == "uneven" else (SPECS / f"{name}.yaml").read_text()
    circuit = read_text(text, f"{name}.yaml")
    mem = memory(Engine(circuit))
    if mem.kept and circuit.port.style != "charge":
        circuit = read_text(text.replace("\nport:\n", "\nport:\n  style: charge\n"), f"{name}.yaml")
        mem = memory(Engine(circuit))
    behaviour = derive(circuit)
    return Right(circuit, behaviour, plan(circuit, behaviour), mem)


@dataclass(frozen=True, slots=True)
class Wrong:
    """A wrong port: `make` returns a `Port`, or a machine that isn't one."""

    fault: str
    spec: str
    make: Callable[[Right], object]

    def __str__(self) -> str:
        return f"{self.spec}: {self.fault}"


# --- faults that a port's own numbers can have ---


def charge(port: Port) -> Charge:
    """Return the charge machine of a port."""
    assert isinstance(port.machine, Charge)
    return port.machine


def with_modes(port: Port, change: Callable[[int, int], object]) -> Port:
    """Return the port with every mode replaced by ``change(q, held)``."""
    machine = charge(port)
    modes = tuple(tuple(change(q, h) for h in range(port.held_count)) for q in (0, 1))
    return replace(port, machine=replace(machine, modes=modes))


def table_entry(q: int, held: int) -> Callable[[Right], Port]:
    """Flip one entry of the latch's table."""

    def make(given: Right) -> Port:
        machine = given.port.machine
        assert isinstance(machine, Count)
        rows = [list(row) for row in machine.table]
        rows[q][held] ^= 1
        return replace(given.port, machine=replace(machine, table=tuple(map(tuple, rows))))

    return make


def priority_swapped(given: Right) -> Port:
    """Both held: the first button wins instead of the second."""
    machine = given.port.machine
    if isinstance(machine, Count):
        table = tuple((*row[:3], row[1]) for row in machine.table)
        return replace(given.port, machine=replace(machine, table=table))
    return with_modes(given.port, lambda q, h: machine.modes[q][1 if h == 3 else h])


def start_latch(given: Right) -> Port:
    """Start with the latch the other way."""
    return replace(given.port, start_q=1 - given.port.start_q)


def start_copy(given: Right) -> Port:
    """Start with the capacitor full."""
    return replace(given.port, machine=replace(charge(given.port), start=(U16,)))


def polarity(given: Right) -> Port:
    """Drive every output the wrong way round."""
    every = (1 << len(given.port.outputs)) - 1
    return replace(given.port, answer=tuple(tuple(bits ^ every for bits in row) for row in given.port.answer))


def one_answer(given: Right) -> Port:
    """Drive the output wrongly in one latch state, with all buttons held."""
    low, high = given.port.answer
    return replace(given.port, answer=((*low[:-1], low[-1] ^ 1), high))


def other_tick(factor: float) -> Callable[[Right], Port]:
    """Plan for one tick and run with another: a clock that many times fast (slow below 1)."""

    def make(given: Right) -> Port:
        machine, _, _ = plan_charge(given.circuit, given.mem, given.port.tick_s * factor)
        return replace(given.port, machine=machine)

    return make


def both_sides_alike(given: Right) -> Port:
    """Let the high side be the low side upside down: one re-arm time for both directions."""
    machine = charge(given.port)

    def mode(q: int, h: int) -> object:
        low = machine.modes[0][h]
        if q == 0:
            return low
        flips = tuple(Test(t.coeff, not t.ge, U16 - t.limit) for t in low.flips)
        return replace(low, flips=flips, moves=tuple(_mirrored(m) for m in low.moves))

    return with_modes(given.port, mode)


def _mirrored(move: Move) -> Move:
    return replace(move, mirror=not move.mirror)


def filtered(ticks: int) -> Callable[[Right], Port]:
    """Wait for a press to last before acting on it."""

    def make(given: Right) -> Port:
        machine = given.port.machine
        assert isinstance(machine, Count)
        return replace(given.port, machine=replace(machine, press=(ticks,) * len(given.port.buttons)))

    return make


def moved_constants(given: Right) -> Iterator[tuple[str, Port]]:
    """Move each number of a charge port, one at a time, by more than allowed units differ."""
    machine = charge(given.port)
    for q in (0, 1):
        for h in range(given.port.held_count):
            mode = machine.modes[q][h]
            for i, test in enumerate(mode.flips):
                for by in (-12000, 12000):
                    tests = (
                        *mode.flips[:i],
                        replace(test, limit=int(np.clip(test.limit + by, 0, U16))),
                        *mode.flips[i + 1 :],
                    )
                    yield (
                        f"limit {by:+d} at q{q} h{h}",
                        _one_mode(given.port, q, h, replace(mode, flips=tests)),
                    )
            if mode.force:
                yield f"force left out at q{q} h{h}", _one_mode(given.port, q, h, replace(mode, force=()))
            elif not mode.flips:
                yield (
                    f"force put in at q{q} h{h}",
                    _one_mode(given.port, q, h, replace(mode, force=(ALWAYS,))),
                )
            if any(t.limit == 0 and t.ge for t in mode.force):
                continue  # the latch leaves at once: nobody lives here
            for name, move in _moved(mode.moves[0], 3.0 if h == 0 else 10.0):
                yield f"{name} at q{q} h{h}", _one_mode(given.port, q, h, replace(mode, moves=(move,)))


def _one_mode(port: Port, q: int, h: int, mode: object) -> Port:
    return with_modes(port, lambda a, b: mode if (a, b) == (q, h) else charge(port).modes[a][b])


def _moved(move: Move, times: float) -> Iterator[tuple[str, Move]]:
    """Ends by a third of the range, where there is room; speeds by a factor."""
    share = {"jump": 0.0, "scale": move.rate / 65536, "drain": 1 - 0.5**move.shift}.get(move.kind)
    if share is None:
        return
    for by in (-22000, 22000):
        if 0 <= move.end + by <= U16:
            yield f"end {by:+d}", _decay(move, share, move.end + by)
    for name, power in ((f"{times:g} times slow", 1 / times), (f"{times:g} times fast", times)):
        if 0 < share < 1:
            yield name, _decay(move, share**power, move.end)


def _decay(move: Move, share: float, end: float) -> Move:
    rate = int(np.clip(round(65536 * share), 0, U16))
    add = int(np.clip(round(np.clip(end, 0, U16) * (1 - rate / 65536)), 0, U16 - (U16 * rate >> 16)))
    return replace(move, kind="scale", rate=rate, shift=0, add=add, end=int(np.clip(end, 0, U16)))


# --- faults between the buttons and the port ---


class Wrapped:
    """The right port with a fault of its surroundings; its state is (the port's, a memory per lane)."""

    def __init__(self, given: Right) -> None:
        self.given, self.inner = given, PortMachine(given.port)
        self.start_q = given.port.start_q
        self.tick_s, self.held_count = given.port.tick_s, given.port.held_count

    def begin(self, lanes: int) -> tuple[State, np.ndarray]:
        """Return the port's start, and a memory of nothing."""
        return self.inner.begin(lanes), np.zeros((lanes, 2), np.int64)

    def step(self, state: tuple[State, np.ndarray], held: np.ndarray) -> tuple[object, np.ndarray]:
        """Give the port what the fault makes of the buttons."""
        inner, memo = state
        inner, held, memo = self.change(inner, held.astype(np.int64), memo.copy())
        inner, q = self.inner.step(inner, held)
        return (inner, memo), q

    def change(
        self, inner: State, held: np.ndarray, memo: np.ndarray
    ) -> tuple[State, np.ndarray, np.ndarray]:
        """Return the port's state, what it sees, and the memory."""
        raise NotImplementedError


class Edge(Wrapped):
    """Only a new press acts; where nothing is new, the buttons that do nothing are seen."""

    def change(self, inner, held, memo):
        new = held & ~memo[:, 0]
        memo[:, 0] = held
        return inner, np.where(new > 0, held, 0), memo


class FirstEdge(Wrapped):
    """The first button acts by its edge, the others by level: the press counts, not the hold."""

    def change(self, inner, held, memo):
        new = held & ~memo[:, 0] & 1
        memo[:, 0] = held
        return inner, held & ~1 | new, memo


class OnRelease(Wrapped):
    """The first button acts when it is let go."""

    def change(self, inner, held, memo):
        gone = ~held & memo[:, 0] & 1
        memo[:, 0] = held
        return inner, held & ~1 | gone, memo


class Restarted(Wrapped):
    """Every closure of the first button puts the memory back to where it was right after acting."""

    def __init__(self, given: Right) -> None:
        super().__init__(given)
        self.just = _just_turned(given)

    def change(self, inner, held, memo):
        new = (held & ~memo[:, 0] & 1) > 0
        memo[:, 0] = held
        # The press that acts is left alone, or nothing would ever act.
        acts = new & (self.inner.step(inner, held)[1] != inner.q)
        regs = np.where((new & ~acts)[:, None], self.just[inner.q], inner.regs)
        return State(inner.q, regs), held, memo


class Wrap(Wrapped):
    """A counter of open ticks that starts again when it is full: not armed any more, once more."""

    def __init__(self, given: Right, bits: int) -> None:
        super().__init__(given)
        self.full, self.just = 1 << bits, _just_turned(given)

    def change(self, inner, held, memo):
        memo[:, 0] = np.where(held & 1, 0, memo[:, 0] + 1) % self.full
        over = (memo[:, 0] == 0) & (held & 1 == 0)
        regs = np.where(over[:, None], self.just[inner.q], inner.regs)
        return State(inner.q, regs), held, memo


class HoldWrap(Wrapped):
    """A counter of held ticks that starts again when it is full: taken for a new press."""

    def __init__(self, given: Right, bits: int) -> None:
        super().__init__(given)
        self.full = 1 << bits
        self.rest = _resting(given)

    def change(self, inner, held, memo):
        memo[:, 0] = np.where(held & 1, memo[:, 0] + 1, 0) % self.full
        over = (memo[:, 0] == 0) & (held & 1 == 1)
        regs = np.where(over[:, None], self.rest[inner.q], inner.regs)
        return State(inner.q, regs), held, memo


class BootIgnored(Wrapped):
    """A button held at power-on is not seen until it has been let go."""

    def change(self, inner, held, memo):
        memo[:, 0] = np.where(memo[:, 1] == 0, held, memo[:, 0] & held)
        memo[:, 1] = 1
        return inner, held & ~memo[:, 0], memo


class BootCounted(Wrapped):
    """A button held at power-on is taken for a press after all is at rest."""

    def __init__(self, given: Right) -> None:
        super().__init__(given)
        self.rest = _resting(given)

    def change(self, inner, held, memo):
        at_boot = (memo[:, 1] == 0) & (held & 1 == 1)
        memo[:, 1] = 1
        turned = np.where(at_boot, 1 - self.start_q, inner.q).astype(np.uint8)
        regs = np.where(at_boot[:, None], self.rest[turned], inner.regs)
        return State(turned, regs), np.where(at_boot, 0, held), memo


class WaitFirst(Wrapped):
    """A press is seen when it has lasted some ticks."""

    def __init__(self, given: Right, ticks: int) -> None:
        super().__init__(given)
        self.ticks = ticks

    def begin(self, lanes):
        return self.inner.begin(lanes), np.zeros((lanes, len(self.given.port.buttons)), np.int64)

    def change(self, inner, held, memo):
        bits = np.arange(memo.shape[1])
        memo = np.where(held[:, None] >> bits & 1, np.minimum(memo + 1, self.ticks), 0)
        return inner, ((memo >= self.ticks) << bits).sum(axis=1), memo


class Deaf(Wrapped):
    """For some ticks after every closure of the first button it is not seen again: bounce cut off by time."""

    def __init__(self, given: Right, ticks: int) -> None:
        super().__init__(given)
        self.ticks = ticks

    def change(self, inner, held, memo):
        new = (held & ~memo[:, 1] & 1 > 0) & (memo[:, 0] == 0)
        deaf = memo[:, 0] > 0
        memo[:, 0] = np.where(new, self.ticks, np.maximum(memo[:, 0] - 1, 0))
        memo[:, 1] = held
        return inner, np.where(deaf & ~new, held & ~1, held), memo


class Upside(Wrapped):
    """The latch is shown the wrong way round."""

    def step(self, state, held):
        """Show the opposite."""
        inner, q = self.inner.step(state[0], held)
        return (inner, state[1]), 1 - q


def _just_turned(given: Right) -> np.ndarray:
    """Per latch state the copies right after turning to it from rest, shape (2, copies)."""
    return _resting(given)[::-1]


def _resting(given: Right) -> np.ndarray:
    """Per latch state the copies at rest with nothing held, shape (2, copies)."""
    engine, mem = given.mem.engine, given.mem
    empty = engine.empty(0).x[0]
    rests = [frozen_rest(engine, q, 0, empty) for q in (0, 1)]
    copies = [tuple(int(v) for v in np.clip(np.rint(mem.copies(x[None, :])[0]), 0, U16)) for x in rests]
    on = bench(given.port, (copies[0], copies[1]))
    return np.array([copies[q] if on.rest[q] is None else on.rest[q].regs[0] for q in (0, 1)])


# --- the library ---


def wrong_ports() -> tuple[Wrong, ...]:
    """Return ports that say their fault in their own numbers."""
    out = [
        Wrong(f"table entry q{q} h{h} flipped", "kiln_vent", table_entry(q, h))
        for q in (0, 1)
        for h in range(4)
    ]
    out += [
        Wrong("priority swapped", spec, priority_swapped) for spec in ("kiln_vent", "bench_fan", "soap_dose")
    ]
    out += [Wrong("starts the other way", spec, start_latch) for spec in ("soap_dose",)]
    out += [
        Wrong("starts with a full capacitor", spec, start_copy)
        for spec in ("aquarium_light", "map_lamp", "bench_fan")
    ]
    for fault, make in (("wrong polarity", polarity), ("one answer wrong", one_answer)):
        out += [
            Wrong(fault, spec, make) for spec in ("kiln_vent", "aquarium_light", "bench_fan", "soap_dose")
        ]
    out += [Wrong(f"waits for {n} ticks of a press", "kiln_vent", filtered(n)) for n in (5, 20)]
    for spec in ("aquarium_light", "map_lamp", "bench_fan", "soap_dose"):
        out += [
            Wrong("clock 8 times slow", spec, other_tick(1 / 8)),
            Wrong("clock 8 times fast", spec, other_tick(8)),
        ]
    out.append(Wrong("one re-arm time for both directions", "uneven", both_sides_alike))
    return tuple(out)


def wrong_constants(spec: str) -> tuple[Wrong, ...]:
    """Return ports of a spec with one constant moved."""
    return tuple(Wrong(name, spec, lambda _, port=port: port) for name, port in moved_constants(right(spec)))


def wrong_machines() -> tuple[Wrong, ...]:
    """Return machines that no port of ours could be."""
    toggles = ("aquarium_light", "map_lamp", "bench_fan")
    out = [Wrong("edge instead of level", spec, Edge) for spec in ("kiln_vent", "soap_dose")]
    out += [Wrong("edge instead of level", "bench_fan", FirstEdge)]
    out += [Wrong("re-arm counted from the press", spec, FirstEdge) for spec in toggles]
    out += [Wrong("pulse not held by its button", "soap_dose", FirstEdge)]
    out += [Wrong("re-arm restarted by every closure", spec, Restarted) for spec in toggles]
    out += [Wrong("acts on release", spec, OnRelease) for spec in (*toggles, "kiln_vent", "soap_dose")]
    out += [
        Wrong("held at power-on ignored", spec, BootIgnored) for spec in (*toggles, "kiln_vent", "soap_dose")
    ]
    out += [Wrong("held at power-on taken for a later press", spec, BootCounted) for spec in toggles]
    for spec in (*toggles, "kiln_vent", "soap_dose"):
        out.append(
            Wrong(
                "waits first", spec, lambda given: WaitFirst(given, max(4, round(0.03 / given.port.tick_s)))
            )
        )
        out.append(Wrong("shown the wrong way round", spec, Upside))
    for spec in toggles:
        out.append(Wrong("open counter wraps at 8 bits", spec, lambda given: Wrap(given, 8)))
        out.append(Wrong("open counter wraps at 16 bits", spec, lambda given: Wrap(given, 16)))
        out.append(Wrong("held counter wraps at 8 bits", spec, lambda given: HoldWrap(given, 8)))
        out.append(Wrong("held counter wraps at 16 bits", spec, lambda given: HoldWrap(given, 16)))
    out += [
        Wrong(
            "deaf for a time after every closure",
            spec,
            lambda given: Deaf(given, round(0.25 / given.port.tick_s)),
        )
        for spec in toggles
    ]
    return tuple(out)
