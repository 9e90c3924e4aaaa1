"""The sections that judge: verdict, findings and cautions."""

from collections.abc import Mapping

from porter.behaviour.model import Behaviour
from porter.findings import Finding
from porter.parity.model import Parity
from porter.port.model import Port
from porter.report.numbers import percent, plural, seconds, spread
from porter.report.page import (
    Block,
    Box,
    Cell,
    Items,
    Note,
    Section,
    Table,
    Text,
    Tone,
    listed,
    row,
    sentence,
)
from porter.spec.model import Circuit

DRAWING_TONE: Mapping[str, Tone] = {"sound": "good", "typical-only": "fair", "faulty": "bad"}
_DRAWING = {
    "sound": "works in every unit that the part tolerances and the timer's published figures allow",
    "typical-only": "works with typical timer figures, but some unit that the part tolerances and the "
    "timer's published figures allow doesn't",
    "faulty": "doesn't do, even with nominal values, what its buttons promise",
}
PARITY_TONE: Mapping[str, Tone] = {"same": "good", "within": "fair", "differs": "bad"}
_PARITY = {
    "same": "the same as the circuit",
    "within": "the same within the circuit's own spread or with accepted deviations",
    "differs": "different from the circuit",
}
_SEVERITY_TONE: Mapping[str, Tone] = {"error": "bad", "warning": "fair", "note": ""}


def verdict_section(circuit: Circuit, behaviour: Behaviour, port: Port, parity: Parity) -> Section:
    """Return the first section: what was judged, how it came out, what to heed."""
    blocks: list[Block] = [
        Box(DRAWING_TONE[behaviour.verdict], f"Drawing: {behaviour.verdict}", _drawing_text(behaviour)),
        Box(PARITY_TONE[parity.verdict], f"Port: {_PARITY[parity.verdict]}", sentence(parity.statement)),
        Text(summary(circuit, behaviour, port, parity)),
    ]
    if port.why:
        blocks.append(Items("Why this style and this tick", tuple(map(sentence, port.why))))
    if hazards(circuit):
        blocks.insert(0, _hazard_box(circuit))
    return Section("verdict", "Verdict", tuple(blocks))


def summary(circuit: Circuit, behaviour: Behaviour, port: Port, parity: Parity) -> str:
    """Return the verdict in one paragraph."""
    accepted = sum(r.accepted is not None for r in parity.ledger)
    open_rows = sum(r.verdict == "differs" and r.accepted is None for r in parity.ledger)
    return (
        f"{circuit.title} was read from {circuit.file}, solved, and ported in the {port.style} style with a "
        f"tick of {seconds(port.tick_s)}. The drawing is {behaviour.verdict}; "
        f"the port is {_PARITY[parity.verdict]}. "
        f"The ledger has {plural(len(parity.ledger), 'row')}: {plural(open_rows, 'open difference')} and "
        f"{plural(accepted, 'accepted deviation')}."
    )


def _drawing_text(behaviour: Behaviour) -> str:
    counts = [
        plural(sum(f.severity == level for f in behaviour.findings), level)
        for level in ("error", "warning", "note")
    ]
    return f"The circuit {_DRAWING[behaviour.verdict]}. Findings: {listed(counts)}."


# --- findings ---


def findings_section(behaviour: Behaviour) -> Section:
    """Return the findings, errors first, each with its mend and its place."""
    order = ("error", "warning", "note")
    findings = sorted(behaviour.findings, key=lambda f: (order.index(f.severity), f.position))
    blocks: tuple[Block, ...] = tuple(map(_finding, findings))
    return Section("findings", "Findings", blocks or (Text("Nothing was found that needs mending."),))


def _finding(finding: Finding) -> Note:
    at = finding.position
    place = f"{at.file}, line {at.line}, column {at.column}"
    tone = _SEVERITY_TONE[finding.severity]
    return Note(
        tone, finding.severity, finding.rule, sentence(finding.message), sentence(finding.mend), place
    )


# --- cautions ---

_ALWAYS = (
    "Parity as shown here is of logical behaviour: the same answers to the same presses. It says nothing "
    "about safety integrity.",
    "Firmware, the controller's clock and its supply become common causes: one fault in any of them can "
    "affect every button and every output at once.",
    "A stop that protects people stays hard-wired, so that it removes energy without help from firmware.",
    "A controller may reset where the timer did not. After a brown-out or a watchdog reset the latch is in "
    "its power-on state; that state must be the safe one.",
    "Pins float until the firmware runs. Give each output an outside bias to its safe state.",
    "Not examined: the driver stage and its protection, input protection and wiring, electromagnetic "
    "immunity, temperature, ageing, and the controller itself.",
    "The work is subject to local codes. A licensed or competent person decides whether this port may be "
    "fitted, and tests it on the real product first.",
)
_MARKED = (
    "Do not move this function into firmware on the strength of this report: stop, interlock, heater and "
    "motion functions need an assessment of their own, of which this report can only be a part.",
    "Keep a stop that removes energy by wiring and contacts alone. Its release must not restart anything.",
    "Have a licensed or competent person assess the change under the codes that apply where it is used, "
    "and record who did.",
)


def hazards(circuit: Circuit) -> tuple[str, ...]:
    """Return what the spec marks as hazardous, such as ``button STOP (stop)``."""
    buttons = (f"button {b.name} ({b.hazard})" for b in circuit.buttons if b.hazard)
    outputs = (f"output {o.name} ({o.hazard})" for o in circuit.outputs if o.hazard)
    return (*buttons, *outputs)


def _hazard_box(circuit: Circuit) -> Box:
    text = (
        f"The spec marks {listed(hazards(circuit))}. Parity here is of logical behaviour, not of safety "
        "integrity. Read the cautions before anything else in this report."
    )
    return Box("bad", "Marked as hazardous", text)


def cautions_section(circuit: Circuit) -> Section:
    """Return the cautions; they're stronger where the spec marks a hazard."""
    marked = hazards(circuit)
    blocks: list[Block] = [Items("For every port", _ALWAYS)]
    if marked:
        text = f"The spec marks {listed(marked)}."
        blocks.insert(0, Box("bad", "This circuit is marked as hazardous", text, _MARKED))
    return Section("cautions", "Cautions", tuple(blocks))


# --- title block ---


def title_block(circuit: Circuit, port: Port, versions: Mapping[str, str]) -> Table:
    """Return the figures that identify the job."""
    rows = [
        row("Spec file", circuit.file),
        row("Spec SHA-256", Cell(port.spec_sha256, code=True)),
        row("Timer family", circuit.timer.family),
        row("Circuit's supply", spread(circuit.supply, "V")),
        row("Port's supply", spread(circuit.port.supply, "V")),
        row("Style and tick", f"{port.style}, {seconds(port.tick_s)}"),
        row("Controller's clock", f"±{percent(circuit.port.clock)}"),
        row(
            "Made with", ", ".join(f"{name} {version}" for name, version in versions.items()) or "not stated"
        ),
    ]
    return Table("Identification", ("Item", "Value"), tuple(rows))
