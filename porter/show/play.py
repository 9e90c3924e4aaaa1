"""Press sequences from files and words, and what circuit and port do with them."""

import csv
import io
import json
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from pathlib import Path

from porter.charts import run_trace
from porter.circuit.engine import Engine
from porter.circuit.power import Profile
from porter.findings import Finding, PorterError, Position, SpecError
from porter.port.model import Port
from porter.report.lanes import level_at
from porter.spec.model import Circuit
from porter.spec.tree import MAX_BYTES
from porter.trace import Changes, Trace

#: The lane of the timer's own output; no output of a spec can be called that.
_LATCH = "timer output"
#: Ticks that a run may have: minutes of waiting, and nobody reads on.
MOST_TICKS = 5_000_000
_WORD = re.compile(r"(?P<name>[^@]+)@(?P<at>[^+]+)(\+(?P<length>.+))?")
_TIME = re.compile(
    r"(?P<number>\d+(\.\d*)?|\.\d+)(e(?P<power>[+-]?\d{1,2}))?\s*(?P<unit>s|ms|us|µs)?", re.IGNORECASE
)
_UNITS = {
    None: Fraction(1),
    "s": Fraction(1),
    "ms": Fraction(1, 10**3),
    "us": Fraction(1, 10**6),
    "µs": Fraction(1, 10**6),
}
_LEVELS = ("low", "high")


class PressError(PorterError):
    """The presses, or a time that goes with them, can't be used."""


@dataclass(frozen=True, slots=True)
class Tape:
    """A press sequence.

    Args:
        title: for the chart.
        changes: ``(time, names of all held from then on)``, times rising, exact seconds.
        end: end of the run in seconds, None = one second after the last change.
        power_on: True where it begins at power-on unless something else is asked for.
    """

    title: str
    changes: tuple[tuple[Fraction, tuple[str, ...]], ...]
    end: Fraction | None = None
    power_on: bool = False


@dataclass(frozen=True, slots=True)
class Run:
    """What happened: the outputs in `trace`, the timer's output in `circuit` and `port`."""

    trace: Trace
    circuit: Changes
    port: Changes


# --- reading ---


def seconds_of(text: str) -> Fraction:
    """Return a time such as ``0.5``, ``1.5e-3`` or ``20 ms`` in seconds.

    Raises:
        ValueError: not a time, or a negative one.
    """
    found = _TIME.fullmatch(text.strip())
    if found is None:
        raise ValueError(f"`{text.strip()}` is not a time in seconds from 0 on, such as `0.25` or `250ms`")
    unit = found["unit"].lower() if found["unit"] else None
    return Fraction(found["number"]) * Fraction(10) ** int(found["power"] or 0) * _UNITS[unit]


def read_words(words: Sequence[str], circuit: Circuit) -> Tape:
    """Return the sequence of ``--press`` words such as ``SET@0.1+50ms``.

    Raises:
        PressError: a word can't be read, or names an unknown button.
    """
    events = [event for word in words for event in _word(word, circuit)]
    return Tape(circuit.title, _changes(events))


def _word(word: str, circuit: Circuit) -> list[tuple[Fraction, str, bool]]:
    found = _WORD.fullmatch(word)
    if found is None:
        raise PressError(
            f"--press `{word}`: write NAME@AT+LENGTH, such as `{circuit.buttons[0].name}@0.1+50ms`"
        )
    name = found["name"].strip()
    try:
        _known(name, circuit)
        at = seconds_of(found["at"])
        ends = [(at + seconds_of(found["length"]), name, False)] if found["length"] else []
    except ValueError as error:
        raise PressError(f"--press `{word}`: {error}") from None
    return [(at, name, True), *ends]


def _known(name: str, circuit: Circuit) -> None:
    names = [b.name for b in circuit.buttons]
    if name not in names:
        raise ValueError(f"there is no button `{name}`: there are {', '.join(names)}")


def _changes(events: Iterable[tuple[Fraction, str, bool]]) -> tuple[tuple[Fraction, tuple[str, ...]], ...]:
    """Turn presses and releases into held sets; those of one time happen together, overlaps count."""
    steps: dict[Fraction, dict[str, int]] = {}
    for at, name, down in events:
        counts = steps.setdefault(at, {})
        counts[name] = counts.get(name, 0) + (1 if down else -1)
    held: dict[str, int] = {}
    out = []
    for at in sorted(steps):
        for name, by in steps[at].items():
            held[name] = held.get(name, 0) + by
        out.append((at, tuple(name for name, count in held.items() if count > 0)))
    return tuple(out)


def read_file(path: str, circuit: Circuit, port: Port, case: str | None) -> Tape:
    """Return the sequence of a CSV file.

    Its header tells its kind: ``time_s,button,action``; ``time_s`` and buttons (0 or 1 from that time on);
    or a file of test vectors, of which `case` picks one.

    Raises:
        SpecError: with everything that is wrong in the file, by line.
        PressError: the file can't be read, or `case` doesn't fit it.
    """
    reader = _Reader(path, _text(path), circuit, port)
    heads = reader.heads
    if heads == ["time_s", "button", "action"]:
        tape = reader.actions()
    elif heads[:2] == ["case", "tick"]:
        return reader.vectors(case)
    elif heads[:1] == ["time_s"] and len(heads) > 1:
        tape = reader.levels()
    else:
        reader.fail(
            1, "the header is none that is known", "write `time_s,button,action`, or `time_s` and the buttons"
        )
        raise reader.refusal()
    if case is not None:
        raise PressError(f"--case `{case}`: only a file of test vectors has cases, `{path}` is none")
    return tape


def _text(path: str) -> str:
    try:
        with Path(path).open("rb") as stream:
            data = stream.read(64 * MAX_BYTES + 1)
    except OSError as error:
        raise PressError(f"can't read `{path}`: {error.strerror or error}") from None
    if len(data) > 64 * MAX_BYTES:
        raise PressError(
            f"`{path}` is longer than {64 * MAX_BYTES >> 20} MiB: cut it to the part that matters"
        )
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise PressError(f"`{path}` is not UTF-8 text (byte {error.start})") from None


class _Reader:
    """One file of presses: its rows with their line numbers, and what is wrong with them."""

    def __init__(self, path: str, text: str, circuit: Circuit, port: Port) -> None:
        self.path, self.text, self.circuit, self.port = path, text, circuit, port
        self.found: list[Finding] = []
        lines = csv.reader(io.StringIO(text, newline=""))
        try:
            rows = [(lines.line_num, [cell.strip() for cell in row]) for row in lines]
        except csv.Error as error:
            self.fail(
                lines.line_num, f"this is not CSV: {error}", "write one row a line, cells set apart by commas"
            )
            raise self.refusal() from None
        rows = [(line, row) for line, row in rows if any(row)]
        self.heads = rows[0][1] if rows else []
        self.rows = rows[1:]

    def fail(self, line: int, message: str, mend: str) -> None:
        lines = self.text.splitlines()
        length = len(lines[line - 1]) if 0 < line <= len(lines) else 1
        self.found.append(
            Finding("presses-unusable", "error", Position(self.path, max(line, 1), 1, length), message, mend)
        )

    def refusal(self) -> SpecError:
        return SpecError(tuple(self.found), self.text)

    def time(self, line: int, text: str) -> Fraction:
        try:
            return seconds_of(text)
        except ValueError as error:
            self.fail(line, str(error), "write the seconds since the start, such as `0.25`")
            return Fraction(0)

    def width(self, line: int, row: list[str]) -> bool:
        if len(row) != len(self.heads):
            self.fail(
                line, f"{len(row)} cells where {len(self.heads)} belong", f"write {','.join(self.heads)}"
            )
        return len(row) == len(self.heads)

    def actions(self) -> Tape:
        """Read ``time_s,button,action``; pressing what is held or releasing what is open changes nothing."""
        events = []
        for line, row in self.rows:
            if self.width(line, row):
                events.append((self.time(line, row[0]), line, row[1], row[2]))
                self._check_action(line, row)
        if self.found:
            raise self.refusal()
        held: dict[str, None] = {}
        steps: dict[Fraction, tuple[str, ...]] = {}
        for at, _, name, action in sorted(events, key=lambda e: e[:2]):
            held.pop(name, None)
            held.update({name: None} if action == "press" else {})
            steps[at] = tuple(held)
        return Tape(f"{self.circuit.title}: {Path(self.path).name}", tuple(steps.items()))

    def _check_action(self, line: int, row: list[str]) -> None:
        self._check_button(line, row[1])
        if row[2] not in ("press", "release"):
            self.fail(line, f"`{row[2]}` is no action", "write `press` or `release`")

    def _check_button(self, line: int, name: str) -> None:
        try:
            _known(name, self.circuit)
        except ValueError as error:
            self.fail(line, str(error), "name a button of the spec")

    def levels(self) -> Tape:
        """Read ``time_s`` and a column of 0 and 1 for each button; buttons without a column stay open."""
        for name in self.heads[1:]:
            self._check_button(1, name)
        steps: dict[Fraction, tuple[str, ...]] = {}
        last = Fraction(-1)
        for line, row in self.rows:
            if not self.width(line, row):
                continue
            at = self.time(line, row[0])
            if at <= last:
                self.fail(
                    line, "its time is not after that of the row before", "write the rows in order of time"
                )
            last = at
            steps[at] = self._held(line, self.heads[1:], row[1:])
        if self.found:
            raise self.refusal()
        return Tape(f"{self.circuit.title}: {Path(self.path).name}", tuple(steps.items()))

    def _held(self, line: int, names: Sequence[str], cells: Sequence[str]) -> tuple[str, ...]:
        wrong = [cell for cell in cells if cell not in ("0", "1")]
        if wrong:
            self.fail(line, f"`{wrong[0]}` is neither 0 nor 1", "write 1 for pressed, 0 for open")
        return tuple(name for name, cell in zip(names, cells, strict=True) if cell == "1")

    def vectors(self, case: str | None) -> Tape:
        """Read one case of a file of test vectors, as `porter vectors` writes it, ticks of this port."""
        buttons = [b.name for b in self.circuit.buttons]
        if self.heads[2 : 2 + len(buttons)] != buttons:
            self.fail(
                1, "the columns are not this spec's buttons", f"begin with case,tick,{','.join(buttons)}"
            )
            raise self.refusal()
        names = list(dict.fromkeys(row[0] for _, row in self.rows))
        if case is None and len(names) == 1:
            case = names[0]
        if case is None or case not in names:
            some = ", ".join(names[:5])
            raise PressError(f"`{self.path}` holds {len(names)} cases, pick one with --case NAME: {some} …")
        rows = [(line, row) for line, row in self.rows if row[0] == case and self.width(line, row)]
        tick = Fraction(repr(self.port.tick_s))
        steps = {
            self.time(line, row[1]) * tick: self._held(line, buttons, row[2 : 2 + len(buttons)])
            for line, row in rows
        }
        if self.found or not steps:
            raise self.refusal()
        changes = tuple(sorted(steps.items()))
        return Tape(f"{self.circuit.title}: {case}", changes, changes[-1][0] + tick, power_on=True)


def save_changes(changes: Iterable[tuple[int, tuple[str, ...]]], port: Port, file: Path) -> None:
    """Write a counterexample as a sequence that `read_file` reads; times are whole ticks.

    Raises:
        PressError: the file exists or can't be written.
    """
    tick = Fraction(repr(port.tick_s))
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\r\n")
    writer.writerow(["time_s", "button", "action"])
    before: set[str] = set()
    for at, held in changes:
        now = float(at * tick)
        gone, come = before - set(held), set(held) - before
        writer.writerows([now, name, "release"] for name in port.buttons if name in gone)
        writer.writerows([now, name, "press"] for name in port.buttons if name in come)
        before = set(held)
    try:
        with file.open("xb") as stream:
            stream.write(text.getvalue().encode())
    except FileExistsError:
        raise PressError(f"`{file}` exists and is not written over: give another name") from None
    except OSError as error:
        raise PressError(f"can't write `{file}`: {error.strerror or error}") from None


# --- running ---


def read_supply(text: str) -> Profile:
    """Return the course of the supply that ``--supply`` gives, such as ``0:0,10ms:12,1:12,1:0,1.1:12``.

    Raises:
        PressError: it can't be read.
    """
    try:
        pairs = [part.split(":") for part in text.split(",")]
        points = tuple((float(seconds_of(at)), _volts(volts)) for at, volts in pairs)
        return Profile(points)
    except ValueError as error:
        said = str(error) if "unpack" not in str(error) else f"`{text}` is not a list of TIME:VOLTS"
        raise PressError(f"--supply: {said}; write TIME:VOLTS, such as `0:0,10ms:12` for a ramp") from None


def _volts(text: str) -> float:
    try:
        return float(text.strip().removesuffix("V"))
    except ValueError:
        raise ValueError(f"`{text.strip()}` is not a voltage such as `12` or `4.5 V`") from None


def play(
    circuit: Circuit,
    port: Port,
    tape: Tape,
    start: str | None,
    until: str | None,
    supply: Profile | None = None,
) -> Run:
    """Run circuit and port through a sequence.

    Args:
        start: ``low`` or ``high``: at rest with that output, no button held; ``power-on``; None = as the
            tape says, else at rest as the port starts.
        until: end of the run as text, None = the tape's.
        supply: its course, None = always there.

    Raises:
        PressError: the circuit doesn't rest at the start, or the end can't be used.
    """
    end = _end(tape, until, port, 0.0 if supply is None else supply.points[-1][0])
    q = port.start_q if start in (None, "power-on") else _LEVELS.index(start)
    off = supply is not None and supply.points[0][1] == 0
    empty = start == "power-on" or off or (start is None and tape.power_on)
    engine = Engine(circuit)
    if not empty and not engine.rest(q)[1][0]:
        raise PressError(f"the circuit doesn't stay {_LEVELS[q]} with no button held: give another --start")
    schedule = [(float(at), names) for at, names in tape.changes if at <= end]
    if not schedule or schedule[0][0] > 0:
        schedule.insert(0, (0.0, ()))
    how = {"start": "empty" if empty else "settled", "output": _LEVELS[q], "engine": engine, "supply": supply}
    trace = run_trace(circuit, port, schedule, float(end), tape.title, **how)  # type: ignore[arg-type]
    bare = run_trace(circuit, _latch_only(port), schedule, float(end), "", **how)  # type: ignore[arg-type]
    return Run(trace, _from(q, trace.latch, empty), _from(q, _latch(bare), empty))


def _end(tape: Tape, until: str | None, port: Port, supply_s: float) -> Fraction:
    last = max(tape.changes[-1][0] if tape.changes else Fraction(0), Fraction(supply_s))
    try:
        end = tape.end or last + 1 if until is None else seconds_of(until)
    except ValueError as error:
        raise PressError(f"--until: {error}") from None
    if end <= 0 or end / Fraction(port.tick_s) > MOST_TICKS:
        most = MOST_TICKS * port.tick_s
        raise PressError(
            f"the run would last {float(end):g} s: it must be longer than 0 and at most {most:g} s"
        )
    return end


def _latch_only(port: Port) -> Port:
    """Return the port with its latch as every output."""
    n = port.held_count
    return replace(port, answer=((0,) * n, (255,) * n))


def _latch(bare: Trace) -> Changes:
    assert bare.port is not None
    return next(iter(bare.port.values()))


def _from(q: int, changes: Changes, empty: bool) -> Changes:
    """Put the state of the start first, where something turns it at time 0 already."""
    return changes if empty or changes[0][1] == q else ((0.0, q), *changes)


# --- writing ---


def as_json(run: Run) -> str:
    """Return the timer's output in circuit and port as the contract's JSON, one change a line."""
    both = {"circuit": run.circuit, "port": run.port}
    lines = ",\n".join(f'  "{who}": [\n{_json_changes(changes)}\n  ]' for who, changes in both.items())
    return f"{{\n{lines}\n}}\n"


def _json_changes(changes: Changes) -> str:
    return ",\n".join(f"    {json.dumps([_round(at), _LEVELS[q]])}" for at, q in changes)


def _round(at: float) -> float:
    return float(f"{at:.10g}")


def as_csv(run: Run) -> str:
    """Return every change as CSV: a row a moment, a column for each button and for each output of both."""
    trace = run.trace
    columns: dict[str, Changes] = dict(trace.buttons)
    columns |= {f"circuit {name}": changes for name, changes in trace.circuit.items()}
    columns |= {f"port {name}": changes for name, changes in (trace.port or {}).items()}
    columns |= {f"circuit {_LATCH}": run.circuit, f"port {_LATCH}": run.port}
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\r\n")
    writer.writerow(["time_s", *columns])
    for at in sorted({at for changes in columns.values() for at, _ in changes}):
        writer.writerow([_round(at), *(level_at(changes, at) for changes in columns.values())])
    return text.getvalue()
