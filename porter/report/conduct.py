"""The sections on what the circuit does: held table, priority, power-on, windows, volts, traces."""

from collections.abc import Mapping, Sequence

from porter.behaviour.model import Behaviour, Margin, Window
from porter.port.model import Port
from porter.report.bars import Bar, companions, levels_chart, margins_chart, windows_chart
from porter.report.lanes import compare, trace_chart
from porter.report.numbers import band_range, seconds, volts
from porter.report.page import Block, Cell, Figure, Items, Section, Table, Text, row, sentence, together
from porter.spec.model import Circuit
from porter.trace import Trace

_WINDOW_NAMES: Mapping[str, str] = {
    "shortest-press": "shortest press",
    "re-arm-after-tap": "re-arm after tap",
    "re-arm-after-hold": "re-arm after hold",
    "stray-gap": "stray gap",
}
_WINDOW_MEANS: Mapping[str, str] = {
    "shortest-press": "the shortest closing, from rest, that changes the output",
    "re-arm-after-tap": "how long the contact must be open after a shortest press before the next press acts",
    "re-arm-after-hold": "the same after a press held until everything has settled",
    "stray-gap": "the longest opening, in a hold or in release bounce, that doesn't act as a second press",
}


def held_section(behaviour: Behaviour) -> Section:
    """Return the held table."""
    rows = tuple(
        row(
            together(r.held),
            r.start,
            _settled(r.output),
            seconds(r.period_s) if r.period_s is not None else "–",
        )
        for r in behaviour.held
    )
    heads = ("Held", "From output", "Output once settled", "Period")
    blocks: list[Block] = [Table("What each held combination leads to", heads, rows, "No rows.")]
    if behaviour.notes:
        blocks.append(Items("How this was derived", tuple(map(sentence, behaviour.notes))))
    return Section("held", "Held combinations", tuple(blocks))


def _settled(output: str) -> Cell:
    return Cell(output, "bad") if output in ("oscillates", "undetermined") else Cell(output)


def priority_section(behaviour: Behaviour) -> Section:
    """Return who wins, and what decides when several buttons are let go one after the other."""
    winners = tuple(
        row(together(r.held), _settled(r.output), r.winner or "neither alone") for r in behaviour.priority
    )
    releases = tuple(
        row(together(r.held), ", then ".join(r.order), _settled(r.output)) for r in behaviour.releases
    )
    one = "No two buttons can be held together."
    blocks: tuple[Block, ...] = (
        Text(
            f"The circuit is {behaviour.dominance}."
            if behaviour.dominance
            else "No side dominates throughout."
        ),
        Table("Buttons held together", ("Held", "Output", "Whose command wins"), winners, one),
        Table("Order of release", ("All held", "Released", "Output in the end"), releases, one),
    )
    return Section("priority", "Who wins", blocks)


def power_on_section(circuit: Circuit, behaviour: Behaviour, port: Port) -> Section:
    """Return what happens when the supply comes up."""
    power = behaviour.power_on
    chosen = circuit.port.power_on or "left to the circuit"
    rows = (
        row("circuit", _settled(power.output)),
        row("asked of the port by the spec", chosen),
        row("port", "high" if port.start_q else "low"),
    )
    table = Table("Output after the supply steps up with no button held", ("Side", "Output"), rows)
    why = Text(sentence(power.why)) if power.why else Text("No reason given.")
    return Section("power-on", "Power-on", (table, why, *_courses(behaviour)))


def _courses(behaviour: Behaviour) -> tuple[Block, ...]:
    """Return the table of what comes of each course of the supply, nothing where none was followed."""
    if not behaviour.power:
        return ()
    rows = tuple(
        row(
            r.profile,
            together(r.held) if r.held else "–",
            r.start or "off",
            _settled(r.output),
            sentence(r.why),
            r.port,
        )
        for r in behaviour.power
    )
    heads = ("Supply", "Held", "Before", "Output once settled", "Why", "Port")
    return (Table("What comes of each course of the supply", heads, rows, "No rows."),)


# --- windows ---


def windows_section(behaviour: Behaviour, tick_s: float) -> Section:
    """Return windows as charts for each button and a table for all."""
    blocks: list[Block] = [_reading_windows(behaviour)] if behaviour.windows else []
    for k, name in enumerate(dict.fromkeys(w.button for w in behaviour.windows)):
        mine = tuple(w for w in behaviour.windows if w.button == name)
        blocks += _windows_figures(f"windows-{k}", name, mine, tick_s)
    blocks.append(windows_table(behaviour.windows))
    if behaviour.timed:
        blocks.append(_timed_table(behaviour))
    return Section("windows", "Windows", tuple(blocks))


def _timed_table(behaviour: Behaviour) -> Table:
    rows = tuple(
        row(
            t.button,
            t.output,
            seconds(t.seconds.nominal),
            band_range(t.seconds, "s"),
            band_range(t.guaranteed, "s"),
        )
        for t in behaviour.timed
    )
    heads = ("Button", "Output", "Nominal", "Over part tolerances", "Guaranteed")
    return Table("Timed outputs: how long the output stays after a quick press (40 ms)", heads, rows)


def _windows_figures(key: str, button: str, windows: Sequence[Window], tick_s: float) -> list[Figure]:
    bars = tuple(Bar(_WINDOW_NAMES[w.window], f"from {w.start}", w.seconds, w.guaranteed) for w in windows)
    groups = companions(bars)
    figures = []
    for k, group in enumerate(groups):
        part = f", part {k + 1} of {len(groups)}" if len(groups) > 1 else ""
        title = f"Windows of button {button}{part}"
        drawing = windows_chart(f"{key}-{k}", title, group, tick_s)
        figures.append(Figure(drawing, f"{title}, with one tick to scale beneath each"))
    return figures


def _reading_windows(behaviour: Behaviour) -> Items:
    kinds = dict.fromkeys(w.window for w in behaviour.windows)
    meanings = (f"{_WINDOW_NAMES[kind]}: {_WINDOW_MEANS[kind]}" for kind in kinds)
    zones = (
        "“From” is the output that the press in question would change.",
        "Shorter than the least, no allowed unit acts (never); longer than the most, every unit "
        "acts (always); between, units differ (either), and any fixed choice of the port is right.",
    )
    return Items("How to read them", tuple(sentence(text) for text in (*meanings, *zones)))


def windows_table(windows: Sequence[Window]) -> Table:
    """Return every window with both its spreads and where it comes from."""
    rows = tuple(
        row(
            w.button,
            _WINDOW_NAMES[w.window],
            w.start,
            seconds(w.seconds.nominal),
            band_range(w.seconds, "s"),
            band_range(w.guaranteed, "s"),
            w.why or "–",
        )
        for w in windows
    )
    heads = ("Button", "Window", "From", "Nominal", "Over part tolerances", "Guaranteed", "Comes from")
    return Table("Windows in numbers", heads, rows, "No button has a window.")


# --- volts ---


def volts_section(circuit: Circuit, behaviour: Behaviour) -> Section:
    """Return levels and margins, drawn and in numbers."""
    blocks: list[Block] = []
    if behaviour.levels:
        bars = tuple(Bar(n.name, "", n.volts, None) for n in behaviour.levels)
        drawing = levels_chart("levels", "Voltages that matter", bars, circuit.supply.nominal)
        blocks.append(Figure(drawing, "Idle levels, thresholds and output levels"))
    blocks.append(_levels_table(behaviour))
    if behaviour.margins:
        bars = tuple(Bar(m.where, "", m.volts, m.guaranteed) for m in behaviour.margins)
        blocks.append(
            Figure(margins_chart("margins", "Margins", bars), "Margins: how far from the threshold")
        )
    blocks.append(margins_table(behaviour.margins))
    return Section("margins", "Voltages and margins", tuple(blocks))


def _levels_table(behaviour: Behaviour) -> Table:
    rows = tuple(row(n.name, volts(n.volts.nominal), band_range(n.volts, "V")) for n in behaviour.levels)
    return Table("Levels in numbers", ("Level", "Nominal", "Least to most"), rows, "No levels were given.")


def margins_table(margins: Sequence[Margin]) -> Table:
    """Return every margin with whether it holds nominally, over the parts, and guaranteed."""
    rows = tuple(
        row(
            m.where,
            volts(m.volts.nominal),
            band_range(m.volts, "V"),
            band_range(m.guaranteed, "V"),
            margin_verdict(m),
            m.why or "–",
        )
        for m in margins
    )
    heads = ("Where", "Nominal", "Over part tolerances", "Guaranteed", "Holds", "Comes from")
    return Table(
        "Margins in numbers; a negative one is on the wrong side", heads, rows, "No margins were given."
    )


def margin_verdict(margin: Margin) -> Cell:
    """Say how far a margin can be trusted."""
    if _below(margin.volts.nominal):
        return Cell("not even nominally", "bad")
    if _below(margin.volts.least):
        return Cell("not over part tolerances", "bad")
    if _below(margin.guaranteed.least):
        return Cell("typically, not guaranteed", "fair")
    return Cell("guaranteed", "good")


def _below(value: float | None) -> bool:
    return value is not None and value < 0


# --- traces ---


def memory_section(traces: Sequence[Trace], tick_s: float) -> Section:
    """Return the runs that show voltages: the memory over a press, a hold and a release."""
    shown = [t for t in traces if t.waves]
    none = Text("The circuit has no memory but its latch: there is no waveform to show.")
    return Section("memory", "The memory over time", _figures("memory", shown, tick_s) or (none,))


def timing_section(traces: Sequence[Trace], tick_s: float) -> Section:
    """Return the runs of buttons and outputs, circuit above port."""
    shown = [t for t in traces if not t.waves]
    none = Text("No runs of this kind were made.")
    return Section("timing", "Circuit and port, press by press", _figures("timing", shown, tick_s) or (none,))


def _figures(key: str, traces: Sequence[Trace], tick_s: float) -> tuple[Block, ...]:
    return tuple(
        Figure(trace_chart(f"{key}-{k}", t, tick_s), f"{sentence(t.title)} {compare(t, tick_s)}")
        for k, t in enumerate(traces)
    )
