"""What carries too much: contacts across the rails, the timer's output, a supply out of range."""

from collections.abc import Iterator

import numpy as np

from porter.behaviour.rules.case import Case, Situation
from porter.behaviour.rules.mending import candidates, first_good, settle_volts, wording
from porter.behaviour.rules.words import (
    add_part,
    at_least,
    figure,
    held_words,
    level,
    move,
    new_name,
    plain,
    three,
    volts,
)
from porter.circuit.engine import Engine, Mask
from porter.circuit.family import FAMILIES
from porter.circuit.values import Floats
from porter.findings import Finding, Severity

#: Twice the 50 mA rating of small tactile switches (Omron B3F; sealed gold contacts reach 100 mA).
CONTACT_MOST_A = 0.1
CONTACT_FINE_A = 0.05
#: A high output that falls by more than this part of the supply is no logic level any more.
FALL_MOST = 1 / 3
_SLACK = 1 + 1e-9


# --- supply-short ---


def supply_short(case: Case) -> Iterator[Finding]:
    """A held combination that ties the rails together through contacts."""
    found: dict[int, tuple[int, float, Situation]] = {}  # by button: fewest buttons first
    for key in sorted(case.situations, key=lambda k: (k[1].bit_count(), k[1], -k[0])):
        if key in case.lasting:
            for button, current in _contacts(case, case.situations[key]):
                if abs(current) > CONTACT_MOST_A * _SLACK and button not in found:
                    found[button] = (key[1], abs(current), case.situations[key])
    told: set[int] = set()
    for button, (held, current, situation) in sorted(found.items()):
        if held not in told:
            told.add(held)
            yield _short(case, button, current, situation)


def _contacts(case: Case, situation: Situation) -> Iterator[tuple[int, float]]:
    for k, b in enumerate(case.topo.branches):
        if b.button >= 0:
            yield b.button, float(situation.currents[k])


def _short(case: Case, index: int, current: float, situation: Situation) -> Finding:
    button = case.circuit.buttons[index]
    message = (
        f"{held_words(case.circuit, situation.held)}, output {level(situation.q)}: {figure(current, 'A')} "
        f"from rail to rail through the contact of {button.name} is more than {figure(CONTACT_MOST_A, 'A')} "
        f"(a small push-button's rating)"
    )
    # A resistor toward the supply spoils no press that pulls an input to ground.
    pressed = [b for i, b in enumerate(case.circuit.buttons) if situation.held >> i & 1 and "vcc" in b.nodes]
    tamed = pressed[0] if pressed else button
    ohm = at_least(case.circuit.supply.most / CONTACT_FINE_A)
    node, name = new_name(case.circuit, f"{tamed.name.lower()}_k"), new_name(case.circuit, f"R{tamed.name}")
    resistor = add_part(name, "resistor", plain(ohm), tamed.nodes[0], node)
    mend = f"{move(tamed.name, node, tamed.nodes[1])} and {resistor}"
    return Finding("supply-short", "error", button.position, message, mend)


# --- output-overloaded ---


def output_overloaded(case: Case) -> Iterator[Finding]:
    """More current than the output is rated for, or a CMOS high output drawn down too far."""
    rated = FAMILIES[case.circuit.timer.family].rated_output_a
    current, key = max((abs(_output_current(case, case.situations[k])), k) for k in case.lasting)
    if current > rated * _SLACK:
        message = (
            f"{held_words(case.circuit, key[1])}, output {level(key[0])}: {figure(current, 'A')} at the "
            f"output is more than {figure(rated, 'A')}, the {case.circuit.timer.family} family's rating"
        )
        yield Finding("output-overloaded", "error", case.place("output"), message, _lighter(case))
    elif FAMILIES[case.circuit.timer.family].output == "resistive":
        yield from _fallen(case)


def _output_current(case: Case, situation: Situation) -> float:
    return float(
        sum(
            i
            for b, i in zip(case.topo.branches, situation.currents, strict=True)
            if b.name.startswith("output ")
        )
    )


def _fallen(case: Case) -> Iterator[Finding]:
    out = case.pin("output")
    high = [k for k in case.lasting if k[0] == 1]
    if out is None or not high:
        return
    least, key = min((case.volts(*k, out), k) for k in high)
    if case.supply - least > case.supply * FALL_MOST * _SLACK:
        message = (
            f"{held_words(case.circuit, key[1])}: the high output is drawn down to {volts(least)}, below "
            f"{volts(case.supply * (1 - FALL_MOST))}, two thirds of the supply"
        )
        yield Finding("output-overloaded", "warning", case.place("output"), message, _lighter(case))


def _lighter(case: Case) -> str:
    """Find the part whose larger value (smaller current) brings the output back within its rating."""
    names = [p.name for p in case.circuit.parts if p.kind in ("resistor", "load")]
    tried = [c for c in candidates(case, names) if (c.ratio > 1) == (_current_of(case, c.name) is None)]
    best = first_good(case, tried, lambda engine: _within(case, engine))
    if best is not None:
        return f"{wording(case, best)}, or switch the load with a transistor"
    return "let a transistor carry what hangs on the output"


def _current_of(case: Case, name: str) -> float | None:
    part = case.part(name)
    return part.current.nominal if part is not None and part.current is not None else None


def _within(case: Case, engine: Engine) -> Mask:
    family = FAMILIES[case.circuit.timer.family]
    out = case.pin("output")
    good = np.ones(len(engine.rows), bool)
    for q, held in case.lasting:
        v: Floats = settle_volts(engine, q, held, out)
        emf, ohm = ("high_drop", "high_resistance") if q else ("low_level", "low_resistance")
        source = engine.supply - _column(engine, emf) if q else _column(engine, emf)
        good &= np.abs(source - v) / np.maximum(_column(engine, ohm), 1e-3) <= family.rated_output_a
        if q and family.output == "resistive":
            good &= engine.supply - v <= engine.supply * FALL_MOST
        if family.output == "one-way":  # it only sources when high, only sinks when low
            good |= (v > source) if q else (v < source)
    return good


def _column(engine: Engine, key: str) -> Floats:
    return np.asarray(engine.rows[:, engine.columns.index(f"timer.{key}")])


# --- timer-out-of-range ---


def timer_out_of_range(case: Case) -> Iterator[Finding]:
    """A supply outside what the timer family is specified for."""
    family = FAMILIES[case.circuit.timer.family]
    low, high = family.supply_v
    supply = case.circuit.supply
    if not low <= supply.nominal <= high:
        value, error = supply.nominal, True
    else:
        value, error = (
            next((v for v in (supply.least, supply.most) if not low <= v <= high), supply.nominal),
            False,
        )
    if low <= value <= high:
        return
    relation = f"below {volts(low)}, the least" if value < low else f"above {volts(high)}, the most"
    which = "" if error else "least " if value == supply.least else "most "
    message = (
        f"the {which}supply of {volts(value)} is {relation} that the {family.name} family is specified for"
    )
    nominal = min(max(supply.nominal, low), high)
    scale = nominal / supply.nominal
    least, most = max(supply.least * scale, low), min(supply.most * scale, high)
    written = f"{plain(nominal)} V" if least == most else three(nominal, least, most, "V")
    others = [
        f.name for f in FAMILIES.values() if f.supply_v[0] <= supply.least and supply.most <= f.supply_v[1]
    ]
    instead = f", or fit a `{others[0]}` timer" if others else ""
    severity: Severity = "error" if error else "warning"
    mend = f"write `supply: {written}`{instead}"
    yield Finding("timer-out-of-range", severity, case.circuit.supply_position, message, mend)
