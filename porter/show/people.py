"""Tables for people: what a circuit does, and what was proved about its port."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from itertools import groupby
from typing import TextIO

from rich.box import SIMPLE_HEAD
from rich.console import Console
from rich.table import Table
from rich.text import Text

from porter.behaviour.model import Band, Behaviour, HeldRow, PowerOn, PowerRow
from porter.parity.model import Parity
from porter.report.numbers import NBSP, band_range, count, quantity, seconds, volts

#: Width of what goes into a file or a pipe; a terminal has its own.
FILE_WIDTH = 120
_TONES = {
    "sound": "green",
    "same": "green",
    "within": "green",
    "typical-only": "yellow",
    "tighter": "yellow",
    "faulty": "red",
    "differs": "red",
    "oscillates": "red",
}
_VERDICTS = {
    "sound": "works in every unit that the tolerances and the timer's published figures allow",
    "typical-only": "works with typical timer figures, but some allowed unit doesn't",
    "faulty": "doesn't do what its buttons promise",
}


def console(text: TextIO, width: int, colour: bool) -> Console:
    """Return a console that writes to *text* as it stands: no markup, no emoji, no guessed colours."""
    return Console(
        file=text,
        width=width,
        color_system="standard" if colour else None,
        force_terminal=colour,
        no_color=not colour,
        legacy_windows=False,
        markup=False,
        emoji=False,
        highlight=False,
    )


def show_table(out: Console, title: str, heads: Sequence[str], rows: Iterable[Sequence[str]]) -> None:
    """Print a table under its title, nothing without rows; a cell that is a verdict gets its colour."""
    made = Table(box=SIMPLE_HEAD, pad_edge=False)
    for head in heads:
        made.add_column(Text(head), overflow="fold")
    for row in rows:
        made.add_row(*(Text(_plain(cell), _TONES.get(cell, "")) for cell in row))
    if made.row_count:
        out.print(Text(title, "bold"))
        out.print(made)


def _plain(text: str) -> str:
    """Return *text* with ordinary spaces, which every terminal and every search knows."""
    return text.replace(NBSP, " ")


def _and(names: Iterable[str]) -> str:
    return " + ".join(names) or "none"


def _headline(out: Console, title: str, verdict: str, said: str) -> None:
    out.print(Text.assemble((title, "bold"), ": ", (verdict, _TONES.get(verdict, "")), f" ({said})"))


# --- behaviour ---


def show_behaviour(out: Console, behaviour: Behaviour, why: bool) -> None:
    """Print everything that `derive` found but its findings.

    Args:
        why: add where each window and margin comes from.
    """
    _headline(out, behaviour.circuit, behaviour.verdict, _VERDICTS[behaviour.verdict])
    power = behaviour.power_on
    out.print(Text(f"after power-on: {power.output}{_differing(power)}; {power.why}"))
    out.print()
    _show_logic(out, behaviour)
    _show_figures(out, behaviour)
    courses = [
        (r.profiles, _and(r.held), r.start, r.output, r.port) for r in grouped_courses(behaviour.power)
    ]
    show_table(out, "When the supply comes and goes", ("supply", "held", "before", "output", "port"), courses)
    if why:
        show_table(out, "Why", ("number", "where it comes from"), _reasons(behaviour))
        show_table(out, "Why the output is so after that", ("supply", "why"), _power_reasons(behaviour))
        show_table(
            out, "The timer's figures", ("figure", "least", "typical", "most", "source"), _figures(behaviour)
        )
    for note in behaviour.notes:
        out.print(Text(f"note: {note}"))


def _show_logic(out: Console, behaviour: Behaviour) -> None:
    show_table(out, "What each held combination does", ("held", "from low", "from high"), _held(behaviour))
    dominance = f" ({behaviour.dominance})" if behaviour.dominance else ""
    priority = [(_and(r.held), r.output, r.winner or "neither alone") for r in behaviour.priority]
    show_table(out, f"Held together: who wins{dominance}", ("held", "output", "winner"), priority)
    releases = [(_and(r.held), ", ".join(r.order), r.output) for r in behaviour.releases]
    show_table(out, "All held, then let go in this order", ("held", "let go", "output"), releases)


def _show_figures(out: Console, behaviour: Behaviour) -> None:
    bands = ("nominal", "with these parts", "guaranteed")
    show_table(out, "Time windows", ("button", "output", "window", *bands), _windows(behaviour))
    if behaviour.timed:
        timed = [(t.button, t.output, *_three(t.seconds, t.guaranteed, "s")) for t in behaviour.timed]
        show_table(out, "Timed outputs (after a press of 40 ms)", ("button", "output", *bands), timed)
    show_table(out, "Margins (negative: on the wrong side)", ("where", *bands), _margins(behaviour))
    levels = [(v.name, _volts(v.volts.nominal), band_range(v.volts, "V")) for v in behaviour.levels]
    show_table(out, "Levels", ("level", "nominal", "least to most"), levels)


def _volts(value: float | None) -> str:
    """Return volts as text; less than a nanovolt is the dust of the arithmetic."""
    return volts(0.0 if value is not None and abs(value) < 1e-9 else value)


def _held(behaviour: Behaviour) -> Iterable[tuple[str, str, str]]:
    found = {(row.held, row.start): row for row in behaviour.held}
    for held in dict.fromkeys(row.held for row in behaviour.held):
        cells = []
        for level in ("low", "high"):
            row = found.get((held, level))
            period = f", period {seconds(row.period_s)}" if row and row.period_s else ""
            units = _differing(row) if row else ""
            cells.append(f"{row.output}{period}{units}" if row else "no rest")
        yield _and(held), cells[0], cells[1]


def _differing(row: HeldRow | PowerOn) -> str:
    if row.corners == "either":
        return " (some units with these parts differ)"
    return " (not guaranteed)" if row.guaranteed == "either" else ""


def _windows(behaviour: Behaviour) -> Iterable[tuple[str, ...]]:
    for w in behaviour.windows:
        if not _is_never(w.guaranteed):
            yield w.button, _turn(w.start), w.window, *_three(w.seconds, w.guaranteed, "s")


def _is_never(band: Band) -> bool:
    return band.nominal is None and band.least is None and band.most is None


def _turn(level: str) -> str:
    return f"{level} to {'high' if level == 'low' else 'low'}"


def _margins(behaviour: Behaviour) -> Iterable[tuple[str, ...]]:
    for m in behaviour.margins:
        yield m.where, *_three(m.volts, m.guaranteed, "V")


def _three(typical: Band, guaranteed: Band, unit: str) -> tuple[str, str, str]:
    return quantity(typical.nominal, unit), band_range(typical, unit), band_range(guaranteed, unit)


def _reasons(behaviour: Behaviour) -> list[tuple[str, str]]:
    windows = [(f"{w.window} of {w.button}, {_turn(w.start)}", w.why) for w in behaviour.windows if w.why]
    margins = [(f"margin: {m.where}", m.why) for m in behaviour.margins if m.why]
    return [*windows, *margins]


def _power_reasons(behaviour: Behaviour) -> Iterable[tuple[str, str]]:
    for row in behaviour.power:
        held = f", {_and(row.held)} held" if row.held else ""
        before = f", from {row.start}" if row.start else ""
        yield f"{row.profile}{held}{before}: {row.output}", row.why


def _figures(behaviour: Behaviour) -> Iterable[tuple[str, ...]]:
    for f in behaviour.figures:
        values = (quantity(v, f.unit) if f.unit else f"{v:.4g}" for v in (f.least, f.typical, f.most))
        yield f.name, *values, f.source


@dataclass(frozen=True, slots=True)
class Courses:
    """Neighbouring courses of the supply that end alike."""

    profiles: str
    held: tuple[str, ...]
    start: str
    output: str
    port: str


def grouped_courses(rows: Iterable[PowerRow]) -> list[Courses]:
    """Put courses of one kind that follow each other and end alike into one."""
    out = []
    for _, some in groupby(
        rows, lambda r: (r.profile.split()[0] == "dip", r.start, r.held, r.output, r.port)
    ):
        group = list(some)
        names = [r.profile for r in group]
        said = names[0] if len(names) == 1 else f"{names[0]} to {names[-1]}"
        first = group[0]
        out.append(Courses(said, first.held, first.start or "off", first.output, first.port))
    return out


# --- parity ---


def show_parity(out: Console, parity: Parity) -> None:
    """Print a proof: the verdict, what was walked and run, the ledger, the counterexample."""
    said = parity.statement.removeprefix(f"{parity.verdict}: ")
    _headline(out, f"{parity.style} style, tick {_plain(seconds(parity.tick_s))}", parity.verdict, said)
    for sentence in (*parity.closure.said, *((parity.family.said,) if parity.family else ())):
        out.print(Text(f"- {sentence}"))
    out.print()
    show_table(out, "Every reachable state", ("what", "found"), _walked(parity))
    show_table(out, "Every sequence of held combinations", ("what", "found"), _run(parity))
    rows = [(r.row, r.circuit, r.port, r.verdict, r.accepted or "") for r in parity.ledger]
    show_table(out, "Ledger", ("row", "circuit", "port", "verdict", "accepted because"), rows)
    if parity.counterexample is not None:
        _show_counterexample(out, parity)


def _walked(parity: Parity) -> list[tuple[str, str]]:
    closure = parity.closure
    return [
        ("states", count(closure.states)),
        ("steps (state and held)", count(closure.steps)),
        ("steps that decide differently", count(closure.differs)),
        ("grey steps (within the bound of a threshold)", count(closure.grey)),
        (
            "a copy is from the true voltage at most",
            "no copies" if closure.bound_v is None else volts(closure.bound_v),
        ),
        (
            "and turns earlier or later by at most",
            "nothing is grey" if closure.band_s is None else seconds(closure.band_s),
        ),
        *(
            (
                f"the same with the tick at {clock:.4g} of nominal",
                "no bound" if c.bound_v is None else volts(c.bound_v),
            )
            for clock, c in parity.clocks
        ),
        ("holds for sequences of any length", "yes" if closure.complete else "no"),
    ]


def _run(parity: Parity) -> list[tuple[str, str]]:
    tried = parity.sequences
    return [
        ("combinations in a row", count(tried.depth)),
        ("ticks each", ", ".join(map(count, tried.strides))),
        ("sequences run", count(tried.count)),
        ("sequences that differ", count(tried.differences)),
        ("sequences that meet grey", count(tried.grey)),
    ]


def _show_counterexample(out: Console, parity: Parity) -> None:
    assert parity.counterexample is not None
    rows = [(count(t), seconds(t * parity.tick_s), _and(held)) for t, held in parity.counterexample]
    title = "Counterexample, from power-on: circuit and port part after its last line"
    show_table(out, title, ("tick", "time", "held from then on"), rows)
