"""Puts the sheet together: supply, contacts, drivers, currents, parts, settings and pins."""

from collections.abc import Sequence

from porter.behaviour.model import Behaviour
from porter.findings import Finding
from porter.port.model import Port
from porter.sheet import figures as fig
from porter.sheet.contacts import contact
from porter.sheet.drivers import stage
from porter.sheet.loads import kept_parts, rest_current
from porter.sheet.model import TOPICS, Driver, Input, Row, Sheet
from porter.spec.model import Circuit

_CAUTIONS = (
    "The sheet knows the drawing and nothing else: wires, connectors, motors nearby and the mains are for "
    "whoever fits it to look at.",
    "Figures marked as from memory are usual ones; check them against the data sheets of the parts fitted.",
    "Fit protection against overvoltage, reversal and static discharge where the wires leave the box.",
    "A stop that protects people stays hard-wired, so that it removes energy without help from firmware.",
)
_MARKED = (
    "The spec marks a stop, interlock, heater or motion function: the driver's failing on must be judged by "
    "a competent person; a transistor fails short more often than open.",
)


def sheet(circuit: Circuit, behaviour: Behaviour, port: Port) -> Sheet:
    """Work out the interface of a port.

    Args:
        behaviour: says where the circuit's power-on state is undetermined.

    Returns:
        The sheet; its findings are errors: ``pin-overloaded``, ``level-not-met``.
    """
    contacts = [contact(circuit, button) for button in circuit.buttons]
    stages = [stage(circuit, port, at) for at in range(len(circuit.outputs))]
    inputs = tuple(network for network, _, _ in contacts)
    drivers = tuple(driver for driver, _, _ in stages if driver is not None)
    active = tuple(
        driver.active if driver is not None else int(output.kind != "low")
        for output, (driver, _, _) in zip(circuit.outputs, stages, strict=True)
    )
    kept = kept_parts(circuit)
    replaced = _replaced(circuit, drivers)
    removed = ("the timer", *(p.name for p in circuit.parts if p.name not in kept or p.name in replaced))
    kept = tuple(name for name in kept if name not in replaced)
    added = _added(circuit, inputs, drivers)
    budget = _budget(circuit, inputs, drivers)
    supply_rows, supply_findings = _supply(circuit, budget)
    rows = (
        *supply_rows,
        *(row for _, made, _ in contacts for row in made),
        *(row for _, made, _ in stages for row in made),
        *_decoupling(circuit),
        *_currents(circuit, port, inputs),
        *_parts(removed, kept, added),
        *_settings(circuit, behaviour, port),
        _pins(circuit),
    )
    findings = (
        *supply_findings,
        *(f for _, _, found in contacts for f in found),
        *(f for _, _, found in stages for f in found),
        *_together(circuit, drivers),
    )
    marked = any(b.hazard for b in circuit.buttons) or any(o.hazard for o in circuit.outputs)
    cautions = (*(_MARKED if marked else ()), *_CAUTIONS)
    ordered = tuple(sorted(rows, key=lambda row: _TOPIC[row.topic]))
    return Sheet(circuit.title, ordered, inputs, drivers, active, removed, kept, added, findings, cautions)


_TOPIC = {topic: i for i, topic in enumerate(TOPICS)}


# --- supply ---


def _budget(circuit: Circuit, inputs: Sequence[Input], drivers: Sequence[Driver]) -> float:
    """Return the most that the port's supply has to give (A): awake, all pressed, all outputs on."""
    supply = circuit.port.supply.most
    pressed = sum(supply / (0.95 * i.pull_ohm) for i in inputs if not i.top_ohm)
    return fig.AWAKE.value + pressed + sum(d.pin_a for d in drivers)


def _direct_supply(circuit: Circuit) -> bool:
    own, wanted = circuit.supply, circuit.port.supply
    return own.most <= wanted.most * (1 + 1e-9) and own.least >= wanted.least * (1 - 1e-9)


def _supply(circuit: Circuit, budget: float) -> tuple[list[Row], list[Finding]]:
    own, wanted = circuit.supply, circuit.port.supply
    findings = _supply_findings(circuit)
    need = f"{budget * 1e3:.3g} mA at most: controller awake, every contact closed, every output on"
    if _direct_supply(circuit):
        row = Row(
            "Supply", "controller", f"straight from the circuit's {own.nominal:g} V", need, fig.AWAKE.source
        )
        return [row], findings
    heat = (own.most - wanted.least) * budget
    what = f"linear regulator from the circuit's {own.nominal:g} V to {wanted.nominal:g} V, for {max(50.0, budget * 2e3):.0f} mA or more"
    why = f"{need}; ({own.most:g} V - {wanted.least:g} V) * {budget * 1e3:.3g} mA = {heat * 1e3:.3g} mW of heat at most"
    return [Row("Supply", "controller", what, why, fig.AWAKE.source)], findings


def _supply_findings(circuit: Circuit) -> list[Finding]:
    own, wanted = circuit.supply, circuit.port.supply
    at, found = circuit.port.position, []
    if not _direct_supply(circuit) and own.least < wanted.nominal + fig.REGULATOR_DROP_V:
        message = (
            f"the circuit's supply falls to {own.least:g} V; a regulator to {wanted.nominal:g} V needs "
            f"{wanted.nominal + fig.REGULATOR_DROP_V:g} V"
        )
        found.append(Finding("level-not-met", "error", at, message, "choose a lower `port.supply`"))
    low, high = fig.SUPPLY_RANGE
    if wanted.least < low or wanted.most > high:
        message = f"the port's supply of {wanted.least:g} V to {wanted.most:g} V leaves the {low:g} V to {high:g} V of the common controllers"
        found.append(
            Finding(
                "level-not-met",
                "error",
                at,
                message,
                "choose a `port.supply` between, such as `5 V` or `3.3 V`",
            )
        )
    return found


def _together(circuit: Circuit, drivers: Sequence[Driver]) -> list[Finding]:
    total = sum(d.pin_a for d in drivers)
    if total <= fig.ALL_PINS.value:
        return []
    message = (
        f"the pins carry {total * 1e3:.3g} mA together, {fig.ALL_PINS.value * 1e3:g} mA is what they may"
    )
    return [
        Finding(
            "pin-overloaded",
            "error",
            circuit.port.position,
            message,
            "drive the larger loads by transistors: a smaller `port.pin_drive`",
        )
    ]


# --- the rest ---


def _decoupling(circuit: Circuit) -> list[Row]:
    have = [p.name for p in circuit.parts if p.kind == "capacitor" and set(p.nodes) == {"vcc", "gnd"}]
    row = Row(
        "Decoupling",
        "controller",
        "100 nF ceramic between its supply pins, within 10 mm",
        "its current comes in steps of nanoseconds",
        "common practice",
    )
    if _direct_supply(circuit) or not have:
        return [row]
    keep = Row(
        "Decoupling",
        "regulator",
        f"keep {', '.join(have)} at its input; 1 uF at its output, or what its data sheet asks for",
        "stability",
        "common practice",
    )
    return [row, keep]


def _currents(circuit: Circuit, port: Port, inputs: Sequence[Input]) -> list[Row]:
    typical, most_a, source = fig.timer_current(circuit.timer.family, circuit.supply.nominal)
    around = rest_current(circuit, port)
    before = Row(
        "Current",
        "before",
        f"{(typical + around) * 1e3:.3g} mA at rest ({(most_a + around) * 1e3:.3g} mA at most)",
        f"timer {typical * 1e3:.3g} mA, resistors at the supply {around * 1e3:.3g} mA; loads apart",
        source,
    )
    closed = {b.name for b in circuit.buttons if b.normally == "closed"}
    through = sum(circuit.port.supply.nominal / i.pull_ohm for i in inputs if i.button in closed)
    own = 0.0 if _direct_supply(circuit) else fig.REGULATOR.value
    after = fig.ASLEEP.value + through + own
    words = [f"controller asleep {fig.ASLEEP.value * 1e6:g} uA"]
    words += [f"regulator {own * 1e6:g} uA"] if own else []
    words += [f"contacts that are closed at rest {through * 1e3:.3g} mA"] if through else []
    return [
        before,
        Row(
            "Current",
            "after",
            f"{after * 1e3:.3g} mA at rest",
            ", ".join(words) + "; loads apart",
            f"{fig.ASLEEP.source}; {fig.REGULATOR.source}",
        ),
    ]


def _replaced(circuit: Circuit, drivers: Sequence[Driver]) -> set[str]:
    """Return the lamp resistors that a lamp straight on a pin gets anew."""
    from porter.sheet.loads import strings

    direct = {d.output for d in drivers if d.stage == "pin"}
    return {
        p.name
        for o in circuit.outputs
        if o.name in direct
        for s in strings(circuit, o)
        for p in s.parts
        if p.kind == "resistor"
    }


_PARTS = {
    "npn": "NPN transistor",
    "n-mosfet": "logic-level N-channel MOSFET",
    "pnp": "PNP transistor",
    "npn-pnp": "NPN and PNP transistor",
    "npn-p-mosfet": "NPN transistor and P-channel MOSFET",
}


def _added(circuit: Circuit, inputs: Sequence[Input], drivers: Sequence[Driver]) -> tuple[str, ...]:
    from porter.sheet.contacts import ohm_text

    parts = ["controller", "100 nF"]
    parts += [] if _direct_supply(circuit) else [f"regulator {circuit.port.supply.nominal:g} V", "1 uF"]
    for i in inputs:
        parts += [
            f"{ohm_text(i.pull_ohm)} ({i.button})",
            f"{ohm_text(i.top_ohm or fig.SERIES_OHM)} ({i.button})",
        ]
    for d in drivers:
        parts += [f"{ohm_text(d.resistor_ohm)} ({d.output})", f"{ohm_text(d.bias_ohm)} ({d.output})"]
        parts += [f"{_PARTS[d.stage]} ({d.output})"] if d.stage != "pin" else []
        parts += [f"{ohm_text(d.upper_ohm)} and 10 kohm ({d.output})"] if d.upper_ohm else []
    driven = {d.output for d in drivers}
    parts += [f"{ohm_text(fig.BIAS_OHM)} ({o.name})" for o in circuit.outputs if o.name not in driven]
    return tuple(parts)


def _parts(removed: tuple[str, ...], kept: tuple[str, ...], added: tuple[str, ...]) -> list[Row]:
    return [
        Row(
            "Parts",
            "removed",
            ", ".join(removed),
            "their work is done by the firmware, or their value changes",
        ),
        Row(
            "Parts",
            "kept",
            ", ".join(kept) or "none",
            "on the load side, or across the supply; the contacts stay too",
        ),
        Row("Parts", "added", ", ".join(added), f"{len(added)} items"),
    ]


def _settings(circuit: Circuit, behaviour: Behaviour, port: Port) -> list[Row]:
    supply, clock = circuit.port.supply, circuit.port.clock
    level = next((pair for pair in fig.BROWN_OUT if pair[1] < supply.least), None)
    brown = f"on, at {level[0]:g} V" if level else "on, at the lowest level that the part has"
    why = (
        f"its most, {level[1]:g} V, lies below the supply's least, {supply.least:g} V"
        if level
        else f"no usual level lies below {supply.least:g} V"
    )
    start = "high" if port.start_q else "low"
    undetermined = (
        " (the circuit's own start is undetermined)" if behaviour.power_on.output == "undetermined" else ""
    )
    source = (
        "a factory-trimmed RC oscillator will do"
        if clock >= 0.02
        else "needs a crystal or resonator, or a trimmed oscillator"
    )
    return [
        Row(
            "Settings",
            "clock",
            f"any rate, within {clock * 100:g} %; {source}",
            f"one step every {port.tick_s * 1e3:g} ms",
            "read: newer 8-bit 2 % at room temperature, 5 % over all; older 10 % untrimmed",
        ),
        Row("Settings", "brown-out", brown, why, "levels read in data sheets of 8-bit controllers"),
        Row(
            "Settings",
            "watchdog",
            "on, about 1 s, fed once a tick",
            f"longer than {port.tick_s * 1e3:g} ms and than any sleep between ticks; off, or slower, in deep sleep",
        ),
        Row(
            "Settings",
            "restart",
            f"the latch starts {start} after power-up, brown-out and watchdog alike{undetermined}",
            "the state is not kept over a reset",
        ),
        Row(
            "Settings",
            "start-up time",
            "shortest that the supply's rise allows: 4 ms, or 65 ms",
            "until then the undriven-time resistors decide",
            "read: options of older 8-bit controllers",
        ),
    ]


def _pins(circuit: Circuit) -> Row:
    inputs, outputs = len(circuit.buttons), len(circuit.outputs)
    return Row(
        "Pins",
        "controller",
        f"{inputs + outputs} pins and two for the supply",
        f"inputs: {inputs}, outputs: {outputs}; the reset pin stays a reset pin",
    )
