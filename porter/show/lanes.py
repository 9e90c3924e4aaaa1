"""A run as text: a lane for each signal over one time axis, and the edges of circuit and port in pairs."""

from bisect import bisect_right
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise

from rich.console import Console
from rich.text import Text

from porter.report.lanes import compare, level_at
from porter.report.numbers import NBSP, seconds
from porter.show.people import show_table
from porter.trace import Changes, Trace

#: What a column of a lane shows: a contact open or closed, an output low, high, or changing.
_CONTACT, _OUTPUT, _CHANGE = ".#", "_▔", "|"
#: Edges of circuit and port this far apart are no pair, in ticks and in seconds.
_APART_TICKS, _APART_S = 10, 0.05


@dataclass(frozen=True, slots=True)
class Edge:
    """An edge of one output: the time in circuit and in port, None where one of them has no such edge."""

    output: str
    level: int
    circuit_s: float | None
    port_s: float | None


def show_trace(out: Console, trace: Trace, tick_s: float) -> None:
    """Print a run of circuit and port."""
    out.print(Text(trace.title, "bold"))
    for line in chart(trace, max(out.width, 60)):
        out.print(Text(line), soft_wrap=True)
    out.print()
    rows = [_row(edge) for edge in edges(trace, tick_s)]
    if rows:
        heads = ("output", "turns", "circuit", "port", "port later by")
        show_table(out, "Edges of the outputs", heads, rows)
    else:
        out.print(Text("No output changes."))
    out.print(Text(compare(trace, tick_s).replace(NBSP, " ").replace(", hatched.", ".")))


def chart(trace: Trace, width: int) -> list[str]:
    """Return the lanes and their time axis, each line at most *width* columns."""
    lanes = list(_lanes(trace))
    label = min(max(len(name) for name, _, _ in lanes), width // 3)
    columns = width - label - 2
    lines = [f"{name[:label]:>{label}} {_lane(c, marks, trace.end_s, columns)}" for name, marks, c in lanes]
    return [*lines, " " * (label + 1) + _axis(trace.end_s, columns)]


def _lanes(trace: Trace) -> Iterator[tuple[str, str, Changes]]:
    for name, changes in trace.buttons.items():
        yield name, _CONTACT, changes
    for name, changes in trace.circuit.items():
        yield f"{name}, circuit", _OUTPUT, changes
        if trace.port is not None and name in trace.port:
            yield f"{name}, port", _OUTPUT, trace.port[name]


def _lane(changes: Changes, marks: str, end_s: float, columns: int) -> str:
    """Return one character a column: the level where it lasts, a mark where something changes in it."""
    borders = [end_s * k / columns for k in range(columns + 1)]
    times = [at for at, _ in changes[1:]]
    counts = [bisect_right(times, border) for border in borders]
    levels = [level_at(changes, border) for border in borders[1:]]
    turned = [after > before for before, after in pairwise(counts)]
    return "".join(_CHANGE if t else marks[level] for t, level in zip(turned, levels, strict=True))


def _axis(end_s: float, columns: int) -> str:
    """Return the times at the quarters of the axis, each beginning under its place."""
    text = ""
    for k in range(4):
        text = f"{text:<{columns * k // 4}}{_time(end_s * k / 4)}"
    last = _time(end_s)
    return f"{text[: columns - len(last) - 1]:<{columns - len(last)}}{last}"


def _time(at: float | None) -> str:
    return "0 s" if at == 0 else seconds(at).replace(NBSP, " ")


# --- edges ---


def edges(trace: Trace, tick_s: float) -> list[Edge]:
    """Return the edges of every output, those of the circuit beside those of the port, in order of time."""
    apart = max(_APART_TICKS * tick_s, _APART_S)
    ported = trace.port or {}
    found = [
        e for name, c in trace.circuit.items() for e in _pairs(name, c[1:], ported.get(name, ())[1:], apart)
    ]
    return sorted(found, key=lambda e: (min(t for t in (e.circuit_s, e.port_s) if t is not None), e.output))


def _pairs(name: str, ours: Changes, theirs: Changes, apart: float) -> Iterator[Edge]:
    i = j = 0
    while i < len(ours) and j < len(theirs):
        (mine, level), (other, its) = ours[i], theirs[j]
        if level == its and abs(mine - other) <= apart:
            yield Edge(name, level, mine, other)
            i, j = i + 1, j + 1
        elif mine <= other:
            yield Edge(name, level, mine, None)
            i += 1
        else:
            yield Edge(name, its, None, other)
            j += 1
    yield from (Edge(name, level, at, None) for at, level in ours[i:])
    yield from (Edge(name, level, None, at) for at, level in theirs[j:])


def _row(edge: Edge) -> tuple[str, str, str, str, str]:
    later = "no pair"
    if edge.circuit_s is not None and edge.port_s is not None:
        later = _time(round(edge.port_s - edge.circuit_s, 9))
    turns = "active" if edge.level else "idle"
    return edge.output, turns, _edge_time(edge.circuit_s), _edge_time(edge.port_s), later


def _edge_time(at: float | None) -> str:
    return "no edge" if at is None else f"{at:.6f} s"
