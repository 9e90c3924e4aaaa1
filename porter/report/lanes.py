"""Timing charts: voltages above, buttons and outputs in lanes beneath, one time axis for all."""

from bisect import bisect_right
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise
from operator import itemgetter

from markupsafe import Markup

from porter.report.numbers import plural, quantity, seconds, volts
from porter.report.svg import WIDTH, Drawing, Scale, draw_axis
from porter.trace import Changes, Trace, Wave

_LEFT = 150.0
_LANE, _SWING = 27.0, 15.0
_VOLTS_HEIGHT = 200.0
_DASHES = 4  # kinds of line in the style sheet: wave-0 to wave-3
#: Edges may be this much farther apart than a tick and still count as one tick: float dust.
_DUST = 1 + 1e-6


@dataclass(frozen=True, slots=True)
class Gap:
    """A stretch of time in which two signals differ, seconds."""

    start: float
    end: float


@dataclass(frozen=True, slots=True)
class _Lane:
    label: str
    style: str
    changes: Changes


def stretches(changes: Changes, end_s: float) -> Iterator[tuple[float, float, int]]:
    """Yield ``(from, to, level)`` in seconds up to *end_s*; a signal without entries is 0."""
    points = [(t, v) for t, v in changes if t < end_s] or [(0.0, 0)]
    ends = [t for t, _ in points[1:]] + [end_s]
    for (start, level), end in zip(points, ends, strict=True):
        yield start, end, level


def differences(one: Changes, other: Changes, end_s: float) -> tuple[Gap, ...]:
    """Return the stretches in which two signals have different levels, neighbours merged."""
    times = sorted({0.0, end_s, *(t for t, _ in (*one, *other) if 0 <= t < end_s)})
    found: list[Gap] = []
    for start, end in pairwise(times):
        if level_at(one, start) == level_at(other, start):
            continue
        if found and found[-1].end == start:
            start = found.pop().start
        found.append(Gap(start, end))
    return tuple(found)


def level_at(changes: Changes, time_s: float) -> int:
    """Return the level at a time; a change counts from its own instant on."""
    if not changes:
        return 0
    return changes[max(bisect_right(changes, time_s, key=itemgetter(0)) - 1, 0)][1]


def compare(trace: Trace, tick_s: float) -> str:
    """Say in a sentence how the port's outputs keep to the circuit's in *trace*."""
    if trace.port is None:
        return "The circuit alone; no port was run."
    gaps = [g for name in trace.circuit for g in _gaps(trace, name)]
    late = [g for g in gaps if g.end - g.start > tick_s * _DUST]
    if late:
        longest = max(g.end - g.start for g in late)
        places = plural(len(late), "place")
        return f"The port differs for longer than a tick in {places}, longest for {seconds(longest)}."
    if gaps:
        return f"Same edges; {plural(len(gaps), 'edge')} up to one tick ({seconds(tick_s)}) apart, hatched."
    return "The port's edges fall together with the circuit's."


def _gaps(trace: Trace, name: str) -> tuple[Gap, ...]:
    if trace.port is None or name not in trace.port:
        return ()
    return differences(trace.circuit[name], trace.port[name], trace.end_s)


def trace_chart(key: str, trace: Trace, tick_s: float) -> Markup:
    """Draw a trace: its waves against volts if it has any, then a lane for each signal.

    Args:
        key: unique in the page.
        tick_s: the port's tick; longer differences are shaded and named.
    """
    drawing = Drawing(key, trace.title, _describe(trace, tick_s))
    right = WIDTH - (200 if trace.levels and trace.waves else 20)
    time = Scale(0.0, max(trace.end_s, 1e-12), _LEFT, right, "s")
    top = _draw_volts(drawing, trace, time) if trace.waves else 8.0
    lanes = _lanes(trace)
    bottom = top + _LANE * len(lanes) + 4
    draw_axis(drawing, time, top, bottom)
    _draw_differences(drawing, trace, lanes, time, top, tick_s)
    for k, lane in enumerate(lanes):
        _draw_lane(drawing, lane, time, top + k * _LANE, trace.end_s)
    drawing.text(0, bottom + 15, "time", "small faint")
    return drawing.markup(bottom + 24)


def _lanes(trace: Trace) -> tuple[_Lane, ...]:
    lanes = [_Lane(f"{name} pressed", "lane-button", c) for name, c in trace.buttons.items()]
    lanes.append(_Lane("timer output", "lane-latch", trace.latch))
    for name, changes in trace.circuit.items():
        lanes.append(_Lane(f"{name}: circuit", "lane-circuit", changes))
        if trace.port is not None and name in trace.port:
            lanes.append(_Lane(f"{name}: port", "lane-port", trace.port[name]))
    return tuple(lanes)


def _draw_lane(drawing: Drawing, lane: _Lane, time: Scale, y: float, end_s: float) -> None:
    low, high = y + 4 + _SWING, y + 4
    drawing.text(0, y + 17, lane.label, fit=_LEFT - 12)
    line: list[tuple[float, float]] = []
    for start, end, level in stretches(lane.changes, end_s):
        a, b, edge = time(start), time(end), high if level else low
        if level:
            drawing.rect(a, high, b - a, _SWING, f"{lane.style} fill")
        line += [(a, edge), (b, edge)]
    drawing.path(line, f"{lane.style} trace")


def _draw_differences(
    drawing: Drawing, trace: Trace, lanes: Sequence[_Lane], time: Scale, top: float, tick_s: float
) -> None:
    labels = [lane.label for lane in lanes]
    for name in trace.circuit:
        y = top + labels.index(f"{name}: circuit") * _LANE
        for gap in _gaps(trace, name):
            left, width = time(gap.start), max(time(gap.end) - time(gap.start), 1.5)
            long = gap.end - gap.start > tick_s * _DUST
            drawing.rect(left, y, width, 2 * _LANE, "gap-long" if long else "gap-short")
            drawing.hatch(left, y, width, 2 * _LANE, "gap-hatch", 4 if long else 8)
            if long and width > 46:
                drawing.text(left + width / 2, y + _LANE + 3, "differs", "small middle strong")


# --- volts ---


def _draw_volts(drawing: Drawing, trace: Trace, time: Scale) -> float:
    """Draw the waves and levels; return where the lanes may begin."""
    top, bottom = 32.0, 32.0 + _VOLTS_HEIGHT
    values = [v for w in trace.waves for v in w.volts] + [v for _, v in trace.levels] + [0.0]
    low, high = min(values), max(values)
    room = max((high - low) * 0.05, 1e-3)
    scale = Scale(low - room * (low < 0), high + room, bottom, top, "V")
    for value, text in scale.ticks():
        y = scale(value)
        drawing.line(time.start, y, time.end, y, "grid")
        drawing.text(time.start - 6, y + 4, text, "small end")
    drawing.line(time.start, top, time.start, bottom, "axis")
    drawing.text(0, (top + bottom) / 2, "volts", "small faint")
    _draw_levels(drawing, trace.levels, scale, time)
    for k, wave in enumerate(trace.waves):
        drawing.path(_thin(wave, time, scale), f"wave wave-{k % _DASHES}")
    _draw_wave_names(drawing, trace.waves, time)
    return bottom + 12


def _draw_levels(drawing: Drawing, levels: Sequence[tuple[str, float]], scale: Scale, time: Scale) -> None:
    placed = -1e9
    for name, value in sorted(levels, key=lambda item: -item[1]):
        y = scale(value)
        drawing.line(time.start, y, time.end, y, "level")
        placed = max(y, placed + 25)  # two lines of text each
        drawing.line(time.end, y, time.end + 6, placed, "leader")
        drawing.text(time.end + 9, placed + 1, name, "small", fit=WIDTH - time.end - 9)
        drawing.text(time.end + 9, placed + 12, volts(value), "small faint")


def _draw_wave_names(drawing: Drawing, waves: Sequence[Wave], time: Scale) -> None:
    x = time.start
    for k, wave in enumerate(waves):
        drawing.line(x, 14, x + 26, 14, f"wave wave-{k % _DASHES}")
        drawing.text(x + 32, 18, wave.name, fit=130)
        x += 32 + min(7.0 * len(wave.name), 140) + 20


def _thin(wave: Wave, time: Scale, scale: Scale) -> list[tuple[float, float]]:
    """Return the wave's points, in each pixel column only its first, least, most and last."""
    columns: dict[int, list[tuple[float, float]]] = {}
    for t, v in zip(wave.times_s, wave.volts, strict=True):
        x = time(t)
        columns.setdefault(int(x), []).append((x, scale(v)))
    return [p for points in columns.values() for p in _outline(points)]


def _outline(points: list[tuple[float, float]]) -> list[tuple[float, float]]:
    if len(points) <= 4:
        return points
    least, most = min(points, key=lambda p: p[1]), max(points, key=lambda p: p[1])
    return [points[0], *sorted((least, most)), points[-1]]


# --- words ---


def _describe(trace: Trace, tick_s: float) -> str:
    parts = [f"{lane.label}: {_changes_text(lane.changes)}." for lane in _lanes(trace)]
    parts += [f"{name} is at {quantity(value, 'V')}." for name, value in trace.levels]
    return " ".join([*parts, compare(trace, tick_s)])


def _changes_text(changes: Changes, most: int = 8) -> str:
    shown = [f"{'on' if level else 'off'} from {seconds(t)}" for t, level in changes[:most]]
    more = len(changes) - most
    return ", ".join(shown) + (f" and {plural(more, 'more change')}" if more > 0 else "")
