"""What is wrong with how the parts are joined: open inputs, bare LEDs, bare coils, no decoupling."""

from collections.abc import Iterable, Iterator

from porter.behaviour.rules.case import Case, name_of, parasitic, volts_at
from porter.behaviour.rules.words import (
    add_part,
    at_least,
    figure,
    held_words,
    level,
    move,
    new_name,
    plain,
)
from porter.circuit.network import GND, VCC, Branch
from porter.findings import Finding
from porter.spec.model import Part

#: Common practice: what an indicator LED carries at most for long, and what suits it.
LED_MOST_A, LED_FINE_A = 30e-3, 10e-3
#: Capacitance between the rails: 100 nF at least beside a bipolar timer, which draws a spike at each
#: switching (Philips ICM7555 description on the bipolar kind; the value is common practice).
BIPOLAR_DECOUPLING_F, CMOS_DECOUPLING_F = 100e-9, 10e-9
_JUST = 1 - 1e-9  # a value on its limit is within it

#: Where an input that nothing drives does nothing.
_IDLE = {"trigger": "vcc", "threshold": "gnd", "reset": "vcc"}


# --- floating-input ---


def floating_input(case: Case) -> Iterator[Finding]:
    """An input that in some situation no conducting path joins to a rail (the control pin may be open)."""
    done: set[int] = set()
    for pin, idle in _IDLE.items():
        node = case.pin(pin)
        if node is None:
            message = f"the {pin} pin is not connected: 0 paths to a rail, and 1 is needed"
            mend = f"tie it: write `{pin}: {idle}` among the timer's pins"
            yield Finding("floating-input", "error", case.circuit.timer.position, message, mend)
        elif node >= 0 and node not in done and (where := _afloat(case, node)) is not None:
            done.add(node)
            yield _floats(case, pin, node, *where)


def _afloat(case: Case, node: int) -> tuple[int, int] | None:
    branches = [b for b in case.topo.branches if not parasitic(b) and not _contact_leak(case, b)]
    for held in range(1 << len(case.circuit.buttons)):
        for q in (0, 1):
            if not _rail_in_reach(node, [b for b in branches if b.fits(q, held)]):
                return q, held
    return None


def _contact_leak(case: Case, b: Branch) -> bool:
    return b.button >= 0 and b.pressed != (case.circuit.buttons[b.button].normally == "open")


def _rail_in_reach(start: int, branches: Iterable[Branch]) -> bool:
    pairs = [(b.a, b.b) for b in branches]
    seen, todo = {start}, [start]
    while todo:
        node = todo.pop()
        if node < 0:
            return True
        for a, b in pairs:
            for here, there in ((a, b), (b, a)):
                if here == node and there not in seen:
                    seen.add(there)
                    todo.append(there)
    return False


def _floats(case: Case, pin: str, node: int, q: int, held: int) -> Finding:
    name = name_of(case.topo, node)
    shared = [p for p in _IDLE if case.pin(p) == node]
    when = f"{held_words(case.circuit, held)}, output {level(q)}"
    inputs = " and ".join(shared)
    message = f"the {inputs} input on `{name}` has 0 conducting paths to a rail ({when}), and 1 is needed"
    first = add_part(new_name(case.circuit, "RP"), "resistor", "10k", _IDLE[pin], name)
    if {"trigger", "threshold"} <= set(shared):
        second = add_part(new_name(case.circuit, "RQ"), "resistor", "10k", name, "gnd")
        return Finding("floating-input", "error", case.place(pin), message, f"{first} and {second}")
    return Finding("floating-input", "error", case.place(pin), message, first)


# --- led-without-resistor ---


def led_without_resistor(case: Case) -> Iterator[Finding]:
    """An LED with nothing but the chip's own resistance before it, or with more current than it stands."""
    for part in case.circuit.parts:
        if part.kind == "led":
            current, where = _led_current(case, part)
            bare = _bare(case, part)
            if bare or current > LED_MOST_A * (1 + 1e-9):
                yield _led(case, part, current, where, bare)


def _led_current(case: Case, part: Part) -> tuple[float, tuple[int, int]]:
    k = next(k for k, b in enumerate(case.topo.branches) if b.name == part.name)
    return max((float(case.situations[key].currents[k]), key) for key in case.lasting)


def _bare(case: Case, led: Part) -> bool:
    """True where no resistance lies between the LED and its source, nor between it and its sink.

    All contacts count as closed: closing more of them only joins more.
    """
    if led.value.nominal >= case.circuit.supply.most:
        return False  # it can't light
    anode, cathode = (case.topo.node(n) for n in led.nodes)
    for q in (0, 1):
        sources, sinks = {VCC}, {GND}
        out, discharge = case.pin("output"), case.pin("discharge")
        if out is not None:
            (sources if q else sinks).add(out)
        if discharge is not None and not q:
            sinks.add(discharge)
        if anode in _spread(case, sources, 0, led) and cathode in _spread(case, sinks, 1, led):
            return True
    return False


def _spread(case: Case, start: set[int], against: int, but: Part) -> set[int]:
    """Nodes that contacts and diodes join to *start* without resistance, along (or against) the arrow."""
    arrows = [p.nodes for p in case.circuit.parts if p.kind in ("led", "diode") and p is not but]
    pairs = [nodes[::-1] if against else nodes for nodes in arrows]
    pairs += [n for b in case.circuit.buttons for n in (b.nodes, b.nodes[::-1])]
    edges = [(case.topo.node(a), case.topo.node(b)) for a, b in pairs]
    seen = set(start)
    while more := {b for a, b in edges if a in seen} - seen:
        seen |= more
    return seen


def _led(case: Case, part: Part, current: float, where: tuple[int, int], bare: bool) -> Finding:
    q, held = where
    when = f"{held_words(case.circuit, held)}, output {level(q)}"
    carries = f"{figure(current, 'A')} in {part.name} ({when})"
    limit = f"{figure(LED_MOST_A, 'A')}, what an indicator LED stands for long (common practice)"
    if current > LED_MOST_A:
        message = f"{carries} is more than {limit}"
    else:
        message = (
            f"0 Ω in series with {part.name}: only the chip's own output limits it to "
            f"{figure(current, 'A')}, and that is no figure to lean on"
        )
    message += "; there is no resistor in its path" if bare and current > LED_MOST_A else ""
    ohm = at_least(max(case.circuit.supply.most - part.value.least, 0.1) / LED_FINE_A)
    node = new_name(case.circuit, f"{part.name.lower()}_a")
    resistor = add_part(new_name(case.circuit, f"R{part.name}"), "resistor", plain(ohm), part.nodes[0], node)
    return Finding(
        "led-without-resistor",
        "error",
        part.position,
        message,
        f"{move(part.name, node, part.nodes[1])} and {resistor}",
    )


# --- relay-without-diode ---


def relay_without_diode(case: Case) -> Iterator[Finding]:
    """A coil whose current has nowhere to go when it is switched off."""
    for part in case.circuit.parts:
        if part.kind == "load" and part.relay:
            drop = _largest_drop(case, part)
            positive, negative = part.nodes if drop >= 0 else part.nodes[::-1]
            across = [p for p in case.circuit.parts if p.kind == "diode" and set(p.nodes) == set(part.nodes)]
            if (negative, positive) not in [p.nodes for p in across]:
                yield _coil(case, part, abs(drop), positive, negative, across)


def _largest_drop(case: Case, part: Part) -> float:
    a, b = (case.topo.node(n) for n in part.nodes)
    drops = [
        volts_at(s.volts, a, case.supply) - volts_at(s.volts, b, case.supply)
        for s in case.situations.values()
    ]
    return max(drops, key=abs)


def _coil(case: Case, part: Part, drop: float, positive: str, negative: str, across: list[Part]) -> Finding:
    # A diode the wrong way round leaves its own voltage on the coil: say the current by the supply then.
    current = part.current.nominal if part.current else (case.supply if across else drop) / part.value.nominal
    message = (
        f"{figure(current, 'A')} in the coil {part.name} must fall to 0 A the instant it is switched off: "
        f"no diode carries it on, and the voltage rises until something gives way"
    )
    if across:
        message = (
            f"{across[0].name} across the coil {part.name} points the wrong way: it shorts the coil's supply "
            f"and leaves its {figure(current, 'A')} nowhere to go"
        )
        mend = move(across[0].name, *across[0].nodes[::-1])
    else:
        mend = add_part(new_name(case.circuit, f"D{part.name}"), "diode", "0.7 V", negative, positive)
    return Finding("relay-without-diode", "error", part.position, message, mend)


# --- no-decoupling ---


def no_decoupling(case: Case) -> Iterator[Finding]:
    """Too little capacitance between the rails."""
    rails = {GND, VCC}
    row = case.evidence.engine.rows
    total = float(sum(farad(row)[0] for a, b, farad, _ in case.topo.caps if {a, b} == rails))
    bipolar = case.circuit.timer.family == "bipolar"
    limit = BIPOLAR_DECOUPLING_F if bipolar else CMOS_DECOUPLING_F
    if total >= limit * _JUST:
        return
    why = "it draws a current spike at each switching" if bipolar else "its wiring is not free of resistance"
    message = (
        f"{figure(total, 'F')} between the rails is less than {figure(limit, 'F')}, common practice beside "
        f"a {case.circuit.timer.family} timer: {why}"
    )
    mend = add_part(new_name(case.circuit, "CD"), "capacitor", "100n", "vcc", "gnd")
    yield Finding(
        "no-decoupling", "warning" if bipolar else "note", case.circuit.timer.position, message, mend
    )
