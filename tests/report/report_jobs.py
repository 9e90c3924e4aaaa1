"""Two invented jobs, every room's result written by hand: a lamp latch and a one-button toggle."""

import math
from dataclasses import dataclass, replace

from porter.behaviour.model import (
    Band,
    Behaviour,
    HeldRow,
    Margin,
    NamedLevel,
    PowerOn,
    PriorityRow,
    ReleaseRow,
    Window,
)
from porter.findings import Finding, Position
from porter.parity.model import Closure, LedgerRow, Parity, Sequences
from porter.port.model import Charge, ChargeMode, Constant, Count, Move, Port, Test
from porter.report import Size, render
from porter.spec.model import (
    Acceptance,
    Button,
    Circuit,
    Intent,
    Leak,
    Output,
    Part,
    PortWishes,
    Spread,
    Timer,
)
from porter.trace import Trace, Wave
from porter.vectors.model import Case, Suite


@dataclass(frozen=True)
class Job:
    """What `render` takes."""

    circuit: Circuit
    behaviour: Behaviour
    port: Port
    parity: Parity
    suite: Suite
    files: dict[str, str]
    traces: tuple[Trace, ...]
    sizes: tuple[Size, ...] = ()

    def html(self) -> str:
        """Return the report."""
        return render(
            self.circuit,
            self.behaviour,
            self.port,
            self.parity,
            self.suite,
            self.files,
            self.traces,
            self.sizes,
            {"porter": "0.1.0"},
        )

    def but(self, part: str, **changes: object) -> "Job":
        """Return the job with fields of one of its parts changed."""
        return replace(self, **{part: replace(getattr(self, part), **changes)})


def about(value: float, share: float) -> Spread:
    return Spread(value, value * (1 - share), value * (1 + share))


def band(value: float, share: float) -> Band:
    return Band(value, value * (1 - share), value * (1 + share))


def at(line: int, file: str = "lamp_latch.yaml") -> Position:
    return Position(file, line, 9)


def part(name: str, kind: str, nodes: tuple[str, str], value: Spread, text: str, **more: object) -> Part:
    plain = {"slope": None, "leak": None, "current": None, "relay": False, "position": at(9)} | more
    return Part(name, kind, nodes, value, text=text, **plain)


# --- two buttons ---

_LAMP_CIRCUIT = Circuit(
    name="lamp_latch",
    title="Glue-pot lamp latch",
    file="lamp_latch.yaml",
    source="circuit: Glue-pot lamp latch\nsupply: 12 V ±10%\n",
    supply=about(12, 0.1),
    supply_position=at(2),
    timer=Timer(
        "bipolar",
        {"trigger": "set", "threshold": "gnd", "reset": "clear", "output": "out"},
        {"high_drop": Spread.exact(1.4), "trigger_ratio": Spread(1 / 3, 0.3, 0.37)},
        at(3),
        {},
        {},
    ),
    parts=(
        part("R1", "resistor", ("vcc", "set"), about(10e3, 0.05), "10k ±5%"),
        part("R2", "resistor", ("vcc", "clear"), about(10e3, 0.05), "10k ±5%"),
        part("C1", "capacitor", ("vcc", "gnd"), about(100e-9, 0.2), "100n ±20%"),
        part("R3", "resistor", ("out", "lamp"), about(1e3, 0.05), "1k ±5%"),
        part("D1", "led", ("lamp", "gnd"), Spread.exact(2.0), "2.0 V", slope=Spread.exact(10)),
    ),
    buttons=(
        Button("SET", ("set", "gnd"), "open", Spread.exact(0.1), None, None, None, at(16)),
        Button(
            "CLEAR", ("clear", "gnd"), "open", Spread.exact(0.1), Spread.exact(10e6), 6.2e-3, None, at(17)
        ),
    ),
    outputs=(Output("lamp", "lit", "D1", None, at(19)),),
    intent=(
        Intent("held", ("SET", "CLEAR"), "low", at(21)),
        Intent("release", ("CLEAR", "SET"), "high", at(22)),
        Intent("power_on", (), "low", at(23)),
    ),
    port=PortWishes(about(3.3, 0.05), 1e-3, 0.02, "auto", "low", 8e-3, at(24)),
    accept=(Acceptance("shortest-press", "operators press for 80 ms or more", "any", "1 ms", at(31)),),
    nodes=("set", "clear", "out", "lamp"),
)

_NOW, _NEVER = Band(0.0, 0.0, 0.0), Band(None, None, None)

_LAMP_BEHAVIOUR = Behaviour(
    circuit="lamp_latch",
    buttons=("SET", "CLEAR"),
    verdict="sound",
    held=(
        HeldRow((), "low", "low", None),
        HeldRow((), "high", "high", None),
        HeldRow(("SET",), "low", "high", None),
        HeldRow(("SET",), "high", "high", None),
        HeldRow(("CLEAR",), "low", "low", None),
        HeldRow(("CLEAR",), "high", "low", None),
        HeldRow(("SET", "CLEAR"), "low", "low", None),
        HeldRow(("SET", "CLEAR"), "high", "low", None),
    ),
    priority=(PriorityRow(("SET", "CLEAR"), "low", "CLEAR"),),
    dominance="reset-dominant",
    releases=(
        ReleaseRow(("SET", "CLEAR"), ("SET", "CLEAR"), "low"),
        ReleaseRow(("SET", "CLEAR"), ("CLEAR", "SET"), "high"),
    ),
    power_on=PowerOn("undetermined", "nothing forces the latch while the supply comes up"),
    windows=(
        Window("SET", "low", "shortest-press", _NOW, _NOW, "SET is wired straight to the trigger"),
        Window("SET", "high", "re-arm-after-tap", _NEVER, _NEVER),
        Window("CLEAR", "high", "shortest-press", _NOW, _NOW, "CLEAR is wired straight to the reset"),
    ),
    margins=(
        Margin("trigger, idle", Band(8, 7.1, 8.9), Band(8, 6.6, 9.2), "12 V - 4 V"),
        Margin("reset, CLEAR held", Band(0.7, 0.69, 0.71), Band(0.7, 0.29, 1.0), "0.7 V - 0.1 ohm * 1.2 mA"),
    ),
    levels=(
        NamedLevel("trigger level", Band(4, 3.6, 4.4)),
        NamedLevel("reset level", Band(0.7, 0.3, 1.0)),
        NamedLevel("idle level of set", Band(12, 10.8, 13.2)),
    ),
    findings=(
        Finding("no-decoupling", "note", at(8), "C1 is 100 nF", "fit 10 µF or more beside a bipolar timer"),
        Finding(
            "power-on-undetermined",
            "warning",
            at(3),
            "nothing forces the latch when the supply comes up",
            "fit an RC on reset, or write `power_on:` in `port`",
        ),
    ),
    notes=("Corners are exact: the circuit has no capacitor that matters",),
)

_LAMP_PORT = Port(
    name="lamp_latch",
    title="Glue-pot lamp latch",
    spec_file="lamp_latch.yaml",
    spec_sha256="5f" * 32,
    buttons=("SET", "CLEAR"),
    outputs=("lamp",),
    tick_s=1e-3,
    style="count",
    start_q=0,
    answer=((0, 0, 0, 0), (1, 1, 1, 1)),
    machine=Count(((0, 1, 0, 0), (1, 1, 0, 0)), (True,) * 4, (1, 1), (1, 1), None),
    constants=(
        Constant("press.SET", 1, "ticks until SET counts as down", "at once = 1 tick", "lamp_latch.yaml:16"),
    ),
    why=("count: every button acts at once, so a latch is all it takes", "tick of 1 ms: fixed by the spec"),
)

_LAMP_PARITY = Parity(
    verdict="within",
    style="count",
    tick_s=1e-3,
    closure=Closure(
        16, 64, 0, None, True, 0, ("for every sequence of presses of any length the answers agree",)
    ),
    sequences=Sequences(6, 4096, 0, 0, (1, 7)),
    ledger=(
        LedgerRow("held-table", "8 rows", "8 rows", "same", None),
        LedgerRow("priority", "CLEAR beats SET", "CLEAR beats SET", "same", None),
        LedgerRow("output-chatter", "follows the contact", "at most once a tick", "tighter", None),
        LedgerRow("shortest-press", "under 1 µs", "1 ms", "differs", "operators press for 80 ms or more"),
    ),
    counterexample=None,
    statement="same with 1 accepted deviation",
)

_SUITE = Suite(
    name="lamp_latch",
    title="Glue-pot lamp latch",
    buttons=("SET", "CLEAR"),
    outputs=("lamp",),
    tick_s=1e-3,
    cases=(
        Case("set_alone", "SET turns the lamp on.", ((5, 0), (10, 1), (5, 0)), ((5, 0), (15, 1))),
        Case("both_held", "CLEAR wins.", ((5, 1), (5, 3), (5, 0)), ((5, 1), (10, 0))),
    ),
    guarantees=("any port with at most 2 states that passes is equivalent (W method, Chow 1978)",),
)

FILES = {
    "firmware/c/lamp_latch.h": "#ifndef LAMP_LATCH_H\n#define LAMP_LATCH_H\n\n#include <stdint.h>\n#endif\n",
    "firmware/c/lamp_latch.c": '#include "lamp_latch.h"\n\nstatic const uint8_t x = 1u & 3u;\n',
    "firmware/micropython/lamp_latch.py": "class LampLatch:\n    def step(self, held):\n        return 1\n",
    "vectors/lamp_latch.csv": "case,tick,SET,CLEAR,lamp,purpose\r\n",
}


def _both_trace(title: str, late: float) -> Trace:
    return Trace(
        title=title,
        end_s=0.1,
        buttons={
            "SET": ((0.0, 0), (0.0103, 1), (0.0704, 0)),
            "CLEAR": ((0.0, 0), (0.0307, 1), (0.0502, 0)),
        },
        circuit={"lamp": ((0.0, 0), (0.0103, 1), (0.0307, 0), (0.0502, 1))},
        port={"lamp": ((0.0, 0), (0.011, 1), (0.031, 0), (0.051 + late, 1))},
        latch=((0.0, 0), (0.0103, 1), (0.0307, 0), (0.0502, 1)),
    )


LAMP = Job(
    _LAMP_CIRCUIT,
    _LAMP_BEHAVIOUR,
    _LAMP_PORT,
    _LAMP_PARITY,
    _SUITE,
    FILES,
    (
        _both_trace("SET held, CLEAR pressed and released meanwhile", 0.0),
        _both_trace("The same with a port that answers late", 0.02),
    ),
    (Size("attiny85", 48, 1, 22), Size("Cortex-M0", 60, 1)),
)


# --- one button ---


def _memory(end_s: float = 3.0, points: int = 3001) -> Trace:
    """A press at 0.2 s held to 1.5 s; the shapes are plausible, not solved."""
    times = tuple(end_s * k / (points - 1) for k in range(points))

    def cap(t: float) -> float:
        if t < 0.2:
            return 10.6
        if t < 1.5:
            return 6.3 + 4.3 * math.exp(-(t - 0.2) / 0.05)
        return 0.1 + 6.2 * math.exp(-(t - 1.5) / 0.47)

    def joined(t: float) -> float:
        return cap(t) if 0.2 <= t < 1.5 else 6.0

    change = ((0.0, 1), (0.2, 0))
    return Trace(
        title="TOGGLE pressed, held until everything has settled, and released",
        end_s=end_s,
        buttons={"TOGGLE": ((0.0, 0), (0.2, 1), (1.5, 0))},
        circuit={"fan": change},
        port={"fan": change},
        latch=change,
        waves=(
            Wave("memory", times, tuple(map(cap, times))),
            Wave("joined inputs", times, tuple(map(joined, times))),
        ),
        levels=(
            ("threshold, 2/3 of the supply", 8.0),
            ("trigger, 1/3 of the supply", 4.0),
            ("idle", 6.0),
            ("half", 5.9),
        ),
    )


_TOGGLE_CIRCUIT = replace(
    _LAMP_CIRCUIT,
    name="fan_toggle",
    title="Drying-cupboard fan toggle",
    file="fan_toggle.yaml",
    parts=(
        part("R1", "resistor", ("vcc", "in"), about(10e3, 0.05), "10k ±5%"),
        part("R2", "resistor", ("in", "gnd"), about(10e3, 0.05), "10k ±5%"),
        part("R4", "resistor", ("out", "mem"), about(100e3, 0.05), "100k ±5%"),
        part(
            "C2",
            "capacitor",
            ("mem", "gnd"),
            about(4.7e-6, 0.2),
            "4u7 ±20%",
            leak=Leak(Spread(1e-7, 0, 1e-6), None),
        ),
        part("K1", "load", ("out", "gnd"), Spread.exact(0), "30 mA", current=about(30e-3, 0.1), relay=True),
    ),
    buttons=(Button("TOGGLE", ("in", "mem"), "open", Spread.exact(0.1), None, 5e-3, None, at(16)),),
    outputs=(Output("fan", "high", "out", "motion", at(19)),),
    intent=(),
    accept=(),
    nodes=("in", "out", "mem"),
)

_TOGGLE_BEHAVIOUR = Behaviour(
    circuit="fan_toggle",
    buttons=("TOGGLE",),
    verdict="typical-only",
    held=(
        HeldRow((), "low", "low", None),
        HeldRow((), "high", "high", None),
        HeldRow(("TOGGLE",), "low", "high", None),
        HeldRow(("TOGGLE",), "high", "oscillates", 23e-3),
    ),
    priority=(),
    dominance="",
    releases=(),
    power_on=PowerOn("low", "the empty capacitor does not reach the trigger"),
    windows=(
        Window("TOGGLE", "low", "shortest-press", _NOW, _NOW, "contact resistance times C2"),
        Window(
            "TOGGLE", "high", "re-arm-after-tap", band(0.516, 0.25), Band(0.516, 0.31, 0.82), "R4·C2·ln(…)"
        ),
        Window(
            "TOGGLE", "high", "re-arm-after-hold", band(0.19, 0.25), Band(0.19, 0.09, None), "R4·C2·ln(…)"
        ),
        Window("TOGGLE", "low", "re-arm-after-tap", band(0.47, 0.25), Band(0.47, 0.3, 0.74), "R4·C2·ln(…)"),
        Window(
            "TOGGLE", "low", "stray-gap", band(0.18, 0.25), Band(0.18, 0.08, 0.33), "as re-arm after hold"
        ),
    ),
    margins=(
        Margin("threshold, idle", Band(2, 1.7, 2.3), Band(2, 1.1, 2.7)),
        Margin("memory charged past the threshold", Band(0.6, 0.4, 0.8), Band(0.6, -0.5, 1.2)),
        Margin("trigger, TOGGLE held", Band(-0.05, -0.2, 0.1), Band(-0.05, -0.3, 0.3)),
    ),
    levels=(
        NamedLevel("idle level of in", Band(6, 5.7, 6.3)),
        NamedLevel("threshold level", Band(8, 7.1, 8.9)),
    ),
    findings=(
        Finding(
            "hold-not-guaranteed", "error", at(3, "fan_toggle.yaml"), "0.480 < 0.5 of the supply", "use cmos"
        ),
    ),
)

_HOLD = ChargeMode((), (Move("hold", 0),))
_FLIP = ChargeMode((Test((1,), True, 40000),), (Move("shift", 32768, shift=4),))

_TOGGLE_PORT = replace(
    _LAMP_PORT,
    name="fan_toggle",
    title="Drying-cupboard fan toggle",
    spec_file="fan_toggle.yaml",
    buttons=("TOGGLE",),
    outputs=("fan",),
    tick_s=5e-3,
    style="charge",
    answer=((0, 0), (1, 1)),
    machine=Charge(("mem",), (0.0,), (12 / 65535,), (0,), ((_HOLD, _FLIP), (_HOLD, _FLIP))),
    constants=(
        Constant(
            "move.q0.TOGGLE.end",
            32768,
            "resting level while held, 65536ths",
            "6.0 V / 12 V",
            "fan_toggle.yaml:9",
        ),
        Constant("flip.q1.TOGGLE", 40000, "threshold, 65536ths", "8.0 V / 12 V * 60000", "fan_toggle.yaml:3"),
    ),
)

TOGGLE = Job(
    _TOGGLE_CIRCUIT,
    _TOGGLE_BEHAVIOUR,
    _TOGGLE_PORT,
    replace(
        _LAMP_PARITY,
        verdict="differs",
        style="charge",
        tick_s=5e-3,
        closure=Closure(131072, 262144, 37, 0.6e-3, False, 2, ()),
        sequences=Sequences(10, 1048576, 3, 11, (1, 13)),
        ledger=(LedgerRow("power-on", "low", "high", "differs", None),),
        counterexample=((0, ()), (3, ("TOGGLE",)), (17, ())),
        statement="differs: see the counterexample",
    ),
    replace(_SUITE, name="fan_toggle", buttons=("TOGGLE",), outputs=("fan",), guarantees=()),
    {name.replace("lamp_latch", "fan_toggle"): text for name, text in FILES.items()},
    (_memory(),),
)

if __name__ == "__main__":  # for a look in a browser: python tests/report/report_jobs.py FOLDER
    import sys
    from pathlib import Path

    for job in (LAMP, TOGGLE):
        Path(sys.argv[1], f"{job.circuit.name}.html").write_text(job.html(), "utf-8")
