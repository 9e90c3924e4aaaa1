"""The sections on the firmware and on the evidence files."""

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from porter.port.model import Charge, Count, Port, Toggle
from porter.report.drawing import wishes_table
from porter.report.numbers import count, plural, seconds, volts
from porter.report.page import Block, Cell, Fold, Listing, Section, Table, Text, row, together
from porter.report.svg import clean_lines
from porter.spec.model import Circuit

_ABOUT = {".h": "C99 header", ".c": "C99 core", ".py": "MicroPython core"}


@dataclass(frozen=True, slots=True)
class Size:
    """Measured size of the firmware's core on one target, bytes; `cycles` is the most a step takes."""

    target: str
    flash: int
    ram: int
    cycles: int | None = None


def firmware_section(
    circuit: Circuit, port: Port, files: Mapping[str, str], sizes: Sequence[Size]
) -> Section:
    """Return how the firmware works, each of its numbers, and its text with line numbers."""
    blocks: list[Block] = [wishes_table(circuit), answer_table(port), *_machine(port), constants_table(port)]
    if sizes:
        blocks.append(_sizes(sizes))
    blocks += [_listing(name, files[name]) for name in core_files(port.name, files)]
    return Section("firmware", "Firmware", tuple(blocks))


def core_files(name: str, files: Mapping[str, str]) -> tuple[str, ...]:
    """Return the paths of the C header, the C core and the MicroPython core, as far as *files* has them."""
    wanted = [name + ending for ending in _ABOUT]
    found = [path for path in files if path.rsplit("/", 1)[-1] in wanted]
    return tuple(sorted(found, key=lambda path: (wanted.index(path.rsplit("/", 1)[-1]), path)))


def _listing(path: str, text: str) -> Listing:
    about = next(said for ending, said in _ABOUT.items() if path.endswith(ending))
    return Listing(path, about, tuple(clean_lines(text).removesuffix("\n").split("\n")))


def answer_table(port: Port) -> Table:
    """Return the outputs for each latch state and held combination."""
    rows = tuple(
        row(together(_members(port.buttons, held)), *(_active(port, q, held) for q in (0, 1)))
        for held in range(port.held_count)
    )
    heads = ("Held", "Active with the latch at 0", "Active with the latch at 1")
    return Table("Answer: outputs by latch and held buttons", heads, rows)


def _active(port: Port, q: int, held: int) -> str:
    return ", ".join(_members(port.outputs, port.answer[q][held])) or "none"


def _members(names: Sequence[str], mask: int) -> tuple[str, ...]:
    return tuple(name for i, name in enumerate(names) if mask >> i & 1)


def _machine(port: Port) -> tuple[Table, ...]:
    machine = port.machine
    return (_charge(machine),) if isinstance(machine, Charge) else _count(port, machine)


def _charge(machine: Charge) -> Table:
    rows = tuple(
        row(name, count(start), volts(low), volts(scale))
        for name, start, low, scale in zip(
            machine.capacitors, machine.start, machine.low_v, machine.scale_v, strict=True
        )
    )
    heads = ("Capacitor", "Copy at power-on", "Copy 0 stands for", "One step stands for")
    return Table("Charge style: integer copies of the capacitors", heads, rows, "No capacitor matters.")


def _count(port: Port, machine: Count) -> tuple[Table, ...]:
    filters = tuple(
        row(name, _ticks(press, port), _ticks(release, port))
        for name, press, release in zip(port.buttons, machine.press, machine.release, strict=True)
    )
    heads = ("Button", "Down after being held for", "Up after being open for")
    tables = [Table("Count style: input filters", heads, filters)]
    if machine.toggle is not None:
        tables.append(_toggle(port, machine.toggle))
    return tuple(tables)


def _toggle(port: Port, toggle: Toggle) -> Table:
    rows = tuple(
        row(
            f"output {level}",
            _ticks(toggle.tap[q], port),
            _ticks(toggle.hold[q], port),
            count(toggle.pace[q]),
        )
        for q, level in enumerate(("low", "high"))
    )
    heads = ("After turning", "Re-arm after a tap", "Re-arm after a hold", "Ticks gained per tick held")
    return Table(f"Count style: the toggle, button {port.buttons[toggle.button]}", heads, rows)


def _ticks(ticks: int, port: Port) -> str:
    return f"{plural(ticks, 'tick')} ({seconds(ticks * port.tick_s)})"


def constants_table(port: Port) -> Table:
    """Return every number of the firmware with its meaning, working and source."""
    rows = tuple(
        row(Cell(c.key, code=True), Cell(str(c.value), code=True), c.meaning, c.working, c.source or "–")
        for c in port.constants
    )
    heads = ("Key", "Value", "Meaning", "Working", "From")
    return Table("Constants", heads, rows, "No constants.")


def _sizes(sizes: Sequence[Size]) -> Table:
    rows = tuple(
        row(
            s.target,
            count(s.flash),
            count(s.ram),
            count(s.cycles) if s.cycles is not None else "not measured",
        )
        for s in sizes
    )
    heads = ("Target", "Flash, bytes", "RAM, bytes", "Cycles a step, at most")
    return Table("Size of the core, initialising and stepping", heads, rows)


# --- evidence ---


def evidence_section(
    port: Port, circuit: Circuit, files: Mapping[str, str], versions: Mapping[str, str]
) -> Section:
    """Return the SHA-256 of each file of the job, and the versions of what made it."""
    rows = tuple(
        row(path, Cell(digest(files[path]), code=True), count(len(_bytes(files[path]))))
        for path in sorted(files)
    )
    made = tuple(row(name, version) for name, version in versions.items())
    blocks: tuple[Block, ...] = (
        Text(f"Made from {circuit.file}, SHA-256 {port.spec_sha256}."),
        Table("Files of this job", ("File", "SHA-256", "Bytes"), rows, "No files were handed over."),
        Table("Versions", ("Program", "Version"), made, "Not stated."),
        Fold(
            "The spec as read",
            (Listing(circuit.file, "spec", tuple(clean_lines(circuit.source).split("\n"))),),
        ),
    )
    return Section("evidence", "Evidence", blocks)


def digest(text: str) -> str:
    """Return the SHA-256 of a file's text as UTF-8, in hexadecimal."""
    return hashlib.sha256(_bytes(text)).hexdigest()


def _bytes(text: str) -> bytes:
    return text.encode("utf-8", "surrogatepass")
