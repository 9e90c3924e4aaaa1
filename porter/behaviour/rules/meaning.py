"""What is not as it was meant: intent lines, and a power-on state that nothing decides."""

from collections.abc import Iterator

from porter.behaviour.measure import OSCILLATES, release_in_order
from porter.behaviour.rules.case import Case
from porter.behaviour.rules.words import held_words, level
from porter.findings import Finding
from porter.spec.model import Intent

_SEEN = ("low", "high", "oscillates")


# --- power-on-undetermined ---


def power_on_undetermined(case: Case) -> Iterator[Finding]:
    """Nothing forces the latch at power-on, and a port has to choose."""
    power_on = case.evidence.behaviour.power_on
    if power_on.output != "undetermined":
        return
    wish = case.circuit.port.power_on
    message = f"the output after power-on is undetermined: 0 of its 2 levels are forced; {power_on.why}"
    place = case.place("output")
    if wish is None:
        mend = "write `power_on: low` under `port` (or `high`), or let a capacitor on reset force it"
        yield Finding("power-on-undetermined", "warning", place, message, mend)
    else:
        mend = f"nothing to mend: the port is told to come up {wish}"
        yield Finding("power-on-undetermined", "note", place, message, mend)


# --- intent-not-met ---


def intent_not_met(case: Case) -> Iterator[Finding]:
    """A line of intent that the circuit does not do."""
    for line in case.circuit.intent:
        if line.kind == "power_on":
            yield from _power_on(case, line)
            continue
        seen = _held(case, line) if line.kind == "held" else _released(case, line)
        wrong = [(q, s) for q, s in seen if s != line.output]
        if wrong or not seen:
            yield _unmet(case, line, seen)


def _mask(case: Case, line: Intent) -> int:
    return sum(1 << i for i, b in enumerate(case.circuit.buttons) if b.name in line.buttons)


def _held(case: Case, line: Intent) -> list[tuple[int, str]]:
    held, mask = case.evidence.nominal.held, _mask(case, line)
    return [(q, _SEEN[int(held[q, mask][0])]) for q in (0, 1) if held[q, mask][0] >= 0]


def _released(case: Case, line: Intent) -> list[tuple[int, str]]:
    names = [b.name for b in case.circuit.buttons]
    order = [names.index(name) for name in line.buttons]
    found = [(q, release_in_order(case.evidence.engine, q, order)) for q in (0, 1)]
    return [(q, _SEEN[int(out)]) for q, out in found if out is not None]


def _unmet(case: Case, line: Intent, seen: list[tuple[int, str]]) -> Finding:
    when = held_words(case.circuit, _mask(case, line))
    if line.kind == "release":
        when = f"{when}, then {', '.join(line.buttons)} released in this order"
    does = (
        " and ".join(f"{_verb(s)} from {level(q)}" for q, s in seen) or "has no settled state to start from"
    )
    message = f"{when}: the output {does}; it is meant to be {line.output}"
    outputs = {s for _, s in seen}
    if len(outputs) == 1 and (only := outputs.pop()) != _SEEN[OSCILLATES]:
        mend = f"write `output: {only}` here if that is meant, or change the circuit"
    else:
        mend = "leave this line out, or change the circuit"
    return Finding("intent-not-met", "error", line.position, message, mend)


def _verb(seen: str) -> str:
    return seen if seen == "oscillates" else f"is {seen}"


def _power_on(case: Case, line: Intent) -> Iterator[Finding]:
    power_on = case.evidence.behaviour.power_on
    if power_on.output == line.output:
        return
    if power_on.output != "undetermined":
        message = (
            f"after power-on the output is {power_on.output}: {power_on.why}; it is meant to be {line.output}"
        )
        mend = f"write `power_on: {power_on.output}` here if that is meant, or change the circuit"
        yield Finding("intent-not-met", "error", line.position, message, mend)
    elif case.circuit.port.power_on == line.output:
        message = (
            f"the circuit leaves its power-on output undetermined; the port comes up {line.output}, as meant"
        )
        mend = "nothing to mend in the port; in the circuit, let a capacitor on reset force it"
        yield Finding("intent-not-met", "note", line.position, message, mend)
    else:
        message = f"after power-on the output is undetermined, low or high; it is meant to be {line.output}"
        mend = f"write `power_on: {line.output}` under `port`, or let a capacitor on reset force it"
        yield Finding("intent-not-met", "error", line.position, message, mend)
