"""From behaviour to a port: style, tick, integer constants, and where each of them came from."""

import hashlib
import math
from collections.abc import Sequence
from typing import Literal

import numpy as np

from porter.behaviour.model import Behaviour, Window
from porter.circuit.engine import Engine
from porter.port.charge import plan_charge
from porter.port.count import fits_count, plan_count
from porter.port.memory import Memory, memory
from porter.port.model import Charge, Constant, Count, Port
from porter.spec.model import Circuit

#: Bounds of a chosen tick: nobody needs a faster one for a hand, nobody should wait longer.
_FINEST_S, _PLAIN_S, _COARSEST_S = 50e-6, 1e-3, 20e-3
_LIT_A = 10e-6  # an LED is taken as lit above this


def plan(circuit: Circuit, behaviour: Behaviour) -> Port:
    """Plan the port of a circuit.

    Args:
        circuit: as read; its ``port`` wishes are followed.
        behaviour: what `derive` found.

    Returns:
        The port; the reasons for style, tick and start stand in ``why``.
    """
    engine = Engine(circuit)
    mem = memory(engine)
    tick_s, tick_why = choose_tick(circuit, behaviour)
    build = _Builder(circuit, behaviour, mem, tick_s, tick_why)
    wish, (fits, why_not) = circuit.port.style, fits_count(behaviour)
    if wish == "charge":
        return build.charge("charge style: asked for by the spec")
    if wish == "count" and not fits:
        return build.charge(f"charge style although the spec asks for count: {why_not}")
    if wish == "count":
        return build.count("count style: asked for by the spec")
    if not mem.kept:
        return build.count("count style: nothing but the latch remembers, so the machine is the circuit")
    if not fits:
        return build.charge(f"charge style: {why_not}")
    counting = build.count(
        "count style: its differences lie inside the spread that allowed units have among themselves"
    )
    parts = _parts_from_family(circuit, behaviour, mem, counting)
    if not parts:
        return counting
    return build.charge(f"charge style: counters alone {parts}")


def _parts_from_family(circuit: Circuit, behaviour: Behaviour, mem: Memory, port: Port) -> str:
    """Say how a counting port does what no allowed unit does, empty where it doesn't.

    The one place that looks ahead in the pipeline: what is asked is what the proof will ask.
    """
    from porter.parity.closure_more import walk_count
    from porter.parity.family import PortMachine, check_family

    if len(mem.kept) > 1:
        return "beside several capacitors can't be walked"
    closure = walk_count(circuit, behaviour, mem, port).closure
    if closure.differs:
        return f"do what no allowed unit does, in {closure.differs} situations at least"
    if not closure.complete:
        return "differ from the nominal circuit in more situations than could be judged"
    family = check_family(circuit, behaviour, PortMachine(port), start_q=port.start_q)
    return (
        f"do what no allowed unit does, in {family.violations} press sequences" if family.violations else ""
    )


class _Builder:
    """Puts a port of either style together."""

    def __init__(
        self, circuit: Circuit, behaviour: Behaviour, mem: Memory, tick_s: float, tick_why: str
    ) -> None:
        self.circuit, self.behaviour, self.mem, self.tick_s, self.tick_why = (
            circuit,
            behaviour,
            mem,
            tick_s,
            tick_why,
        )

    def count(self, why: str) -> Port:
        return self._port("count", why, plan_count(self.circuit, self.behaviour, self.mem, self.tick_s))

    def charge(self, why: str) -> Port:
        return self._port("charge", why, plan_charge(self.circuit, self.mem, self.tick_s))

    def _port(
        self,
        style: Literal["count", "charge"],
        why: str,
        planned: tuple[Count, list[Constant], list[str]] | tuple[Charge, list[Constant], list[str]],
    ) -> Port:
        circuit = self.circuit
        machine, constants, made = planned
        start_q, start_why = _start(circuit, self.behaviour)
        return Port(
            name=circuit.name,
            title=circuit.title,
            spec_file=circuit.file,
            spec_sha256=hashlib.sha256(circuit.source.encode()).hexdigest(),
            buttons=tuple(b.name for b in circuit.buttons),
            outputs=tuple(o.name for o in circuit.outputs),
            tick_s=self.tick_s,
            style=style,
            start_q=start_q,
            answer=answers(self.mem.engine),
            machine=machine,
            constants=tuple(constants),
            why=(why, self.tick_why, start_why, *made),
        )


def answers(engine: Engine) -> tuple[tuple[int, ...], tuple[int, ...]]:
    """Return the outputs' bits for each latch value and held mask, from the settled network."""
    masks = range(1 << len(engine.circuit.buttons))
    first = tuple(_answer(engine, 0, mask) for mask in masks)
    return first, tuple(_answer(engine, 1, mask) for mask in masks)


def _answer(engine: Engine, q: int, mask: int) -> int:
    lanes = engine.empty(q)
    engine.run(lanes, np.inf, frozen=True)
    lanes.held[:] = mask
    engine.run(lanes, np.inf, frozen=True)
    volts = engine.volts(lanes)[0]

    def at(node: str) -> float:
        index = engine.topo.node(node)
        return {-1: 0.0, -2: float(engine.supply[0])}[index] if index < 0 else float(volts[index])

    bits = 0
    for j, output in enumerate(engine.circuit.outputs):
        if output.kind == "lit":
            led = next(p for p in engine.circuit.parts if p.name == output.target)
            slope = led.slope.nominal if led.slope else 10.0
            active = (at(led.nodes[0]) - at(led.nodes[1]) - led.value.nominal) / slope > _LIT_A
        else:
            active = (at(output.target) > 0.5 * engine.supply[0]) == (output.kind == "high")
        bits |= int(active) << j
    return bits


def series_below(limit_s: float) -> float:
    """Return the largest tick of the 1-2-5 series not above a limit.

    >>> series_below(0.0031)
    0.002
    """
    decade = math.floor(math.log10(limit_s) + 1e-9)
    for step in (5, 2, 1):
        tick = float(f"{step}e{decade}")
        if tick <= limit_s * (1 + 1e-9):
            return tick
    return float(f"5e{decade - 1}")


def choose_tick(circuit: Circuit, behaviour: Behaviour) -> tuple[float, str]:
    """Choose the tick: the spec's, or the largest that is within a tenth of each window's spread."""
    if circuit.port.tick_s is not None:
        return circuit.port.tick_s, f"tick {_ms(circuit.port.tick_s)}: fixed by the spec"
    spreads = [s for w in behaviour.windows if (s := _spread(w))]
    if not spreads:
        return (
            _PLAIN_S,
            f"tick {_ms(_PLAIN_S)}: no window has a length, so a pace that no hand can tell from at once",
        )
    tick = min(max(series_below(min(spreads) / 10), _FINEST_S), _COARSEST_S)
    narrowest = _ms(min(spreads))
    return (
        tick,
        f"tick {_ms(tick)}: of the 1-2-5 series, within a tenth of the narrowest window spread ({narrowest})",
    )


def _spread(window: Window) -> float:
    """The width of a window over the allowed units; a fifth of its length where nothing is toleranced."""
    for band in (window.seconds, window.guaranteed):
        if band.nominal and band.least is not None and band.most is not None and band.most > band.least:
            return band.most - band.least
    return (window.seconds.nominal or 0.0) / 5


def _ms(seconds: float) -> str:
    return f"{seconds * 1e3:g} ms"


def _start(circuit: Circuit, behaviour: Behaviour) -> tuple[int, str]:
    wish, found = circuit.port.power_on, behaviour.power_on
    if found.output == "undetermined":
        chosen = wish or "low"
        whose = "as the spec asks" if wish else "chosen here, since the spec says nothing"
        return int(chosen == "high"), f"starts {chosen}, {whose}: the circuit's own start is undetermined"
    if wish and wish != found.output:
        return int(
            wish == "high"
        ), f"starts {wish} as the spec asks, although the circuit starts {found.output}"
    return int(found.output == "high"), f"starts {found.output}, as the circuit does"


def spec_lines(circuit: Circuit, columns: Sequence[str]) -> str:
    """Return ``file:line`` of the spec items that some value columns stand for."""
    lines: dict[int, None] = {}
    for name in columns:
        section, _, item = name.partition(".")
        if section == "supply":
            lines[circuit.supply_position.line] = None
        elif section == "parts":
            lines[next(p for p in circuit.parts if p.name == item.split(".")[0]).position.line] = None
        elif section == "buttons":
            lines[next(b for b in circuit.buttons if b.name == item.split(".")[0]).position.line] = None
        elif item in circuit.timer.value_positions:
            lines[circuit.timer.value_positions[item].line] = None
        else:
            lines[circuit.timer.position.line] = None
    return ", ".join(f"{circuit.file}:{line}" for line in sorted(lines))


__all__ = ["Constant", "choose_tick", "plan", "series_below"]
