"""What hangs on the timer's outputs in the drawing: the part of the circuit that stays."""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

from porter.port.model import Port
from porter.spec.model import RAILS, Circuit, Output, Part

_LED_SLOPE = 10.0  # ohm, the spec's default


@dataclass(frozen=True, slots=True)
class String:
    """A load between the output's node and a rail: an LED with its resistor, or a load alone.

    Args:
        parts: in series, the LED or load first.
        rail: where its far end goes; active: the timer's output level at which it takes current.
        drop_v: of its LEDs, nominal; ohm: least and nominal in series; current: where it is given, else None.
        coil: True for a relay's coil.
    """

    parts: tuple[Part, ...]
    rail: Literal["gnd", "vcc"]
    drop_v: float
    least_ohm: float
    ohm: float
    current_a: float | None
    coil: bool

    def current(self, supply_v: float, *, most: bool = True) -> float:
        """Return the current from a supply, with the least or the nominal resistance."""
        if self.current_a is not None:
            return self.current_a
        return max(0.0, supply_v - self.drop_v) / max(self.least_ohm if most else self.ohm, 1.0)


def strings(circuit: Circuit, output: Output) -> tuple[String, ...]:
    """Return what an output drives; nothing where the drawing ends at its node."""
    if output.kind == "lit":
        led = next(p for p in circuit.parts if p.name == output.target)
        found = _string(circuit, led)
        return (found,) if found else ()
    node = output.target
    loads = (p for p in circuit.parts if p.kind in ("load", "led") and node in _ends(circuit, p))
    return tuple(s for part in loads if (s := _string(circuit, part)) is not None)


def _string(circuit: Circuit, part: Part) -> String | None:
    """Follow a load to the rail on its one side and to the driven node on its other."""
    series = [part, *_series(circuit, part)]
    rails = [node for p in series for node in p.nodes if node in RAILS]
    if len(rails) != 1 or part.kind not in ("load", "led"):
        return None
    resistors = [p for p in series if p.kind == "resistor" or (p.kind == "load" and p.current is None)]
    leds = [p for p in series if p.kind in ("led", "diode")]
    slopes = [p.slope.nominal if p.slope else _LED_SLOPE for p in leds]
    return String(
        tuple(series),
        "gnd" if rails[0] == "gnd" else "vcc",
        sum(p.value.nominal for p in leds),
        sum(p.value.least for p in resistors) + sum(slopes),
        sum(p.value.nominal for p in resistors) + sum(slopes),
        part.current.most if part.kind == "load" and part.current is not None else None,
        part.relay,
    )


def _series(circuit: Circuit, part: Part) -> Iterator[Part]:
    """Yield the resistors in series with a part: those that share a node with nothing else on it."""
    seen, front = {part.name}, [n for n in part.nodes if n not in RAILS]
    while front:
        node = front.pop()
        on = [p for p in circuit.parts if node in p.nodes]
        if (
            node in circuit.timer.pins.values()
            or len(on) != 2
            or any(node in b.nodes for b in circuit.buttons)
        ):
            continue
        for p in on:
            if p.name not in seen and p.kind in ("resistor", "led", "diode"):
                seen.add(p.name)
                front += [n for n in p.nodes if n != node and n not in RAILS]
                yield p


def _ends(circuit: Circuit, part: Part) -> set[str]:
    """Return the nodes at the ends of a part with what is in series with it."""
    return {node for p in (part, *_series(circuit, part)) for node in p.nodes}


def kept_parts(circuit: Circuit) -> tuple[str, ...]:
    """Return the parts on the load side, and the supply's own capacitors."""
    driven = {p.name for o in circuit.outputs for s in strings(circuit, o) for p in s.parts}
    pin = circuit.timer.pins.get("output")
    for part in circuit.parts:  # whatever else hangs on the output: lamps that no named output stands for
        string = _string(circuit, part) if part.kind in ("load", "led") else None
        if string is not None and pin in _ends(circuit, part):
            driven |= {p.name for p in string.parts}
    loads = [p for p in circuit.parts if p.name in driven and p.kind == "load"]
    for p in circuit.parts:
        across = any(p.kind == "diode" and set(p.nodes) == set(load.nodes) for load in loads)
        if across or (p.kind == "capacitor" and set(p.nodes) == set(RAILS)):
            driven.add(p.name)
    return tuple(p.name for p in circuit.parts if p.name in driven)


def rest_current(circuit: Circuit, port: Port) -> float:
    """Return what the parts on the supply rail take at rest with the buttons open, outputs' loads apart (A)."""
    import numpy as np

    from porter.circuit.engine import Engine

    engine = Engine(circuit)
    lanes = engine.empty(port.start_q)
    engine.run(lanes, np.inf, frozen=True)
    volts = engine.volts(lanes)[0]
    supply = float(engine.supply[0])
    at = {"vcc": supply, "gnd": 0.0, **dict(zip(engine.topo.nodes, map(float, volts), strict=True))}
    loads = set(kept_parts(circuit))
    total = 0.0
    for part in circuit.parts:
        if part.kind == "resistor" and "vcc" in part.nodes and part.name not in loads:
            other = next(n for n in part.nodes if n != "vcc")
            total += (supply - at[other]) / part.value.nominal
    return max(0.0, total)  # a pin's own current may flow back through a pull-up
