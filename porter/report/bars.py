"""Bars with a spread: windows along a time axis, voltages and margins along a volt axis."""

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from markupsafe import Markup

from porter.behaviour.model import Band
from porter.report.numbers import band_range, quantity
from porter.report.svg import CHARACTER, WIDTH, Drawing, Scale, draw_axis, log_scale

_GUTTER, _RIGHT = 210.0, WIDTH - 24
_ROW, _TOP = 73.0, 24.0
#: Times farther apart than this many times share a logarithmic axis.
_LINEAR_REACH = 40.0
#: What an axis may span at all, in SI units: beyond it a value sits on the edge.
_TINIEST, _VASTEST = 1e-15, 1e15


@dataclass(frozen=True, slots=True)
class Bar:
    """One row: the nominal value, its spread over the parts, and the spread that is guaranteed, if known."""

    label: str
    under: str
    parts: Band
    guaranteed: Band | None

    @property
    def outer(self) -> Band:
        """The wider of its bands."""
        return self.guaranteed or self.parts

    def values(self) -> tuple[float | None, ...]:
        """Return all six values."""
        a, b = self.parts, self.outer
        return a.nominal, a.least, a.most, b.nominal, b.least, b.most


def finite(bars: Iterable[Bar]) -> tuple[float, ...]:
    """Return the values of *bars* that can be drawn."""
    values = (v for bar in bars for v in bar.values())
    return tuple(v for v in values if v is not None and math.isfinite(v) and abs(v) <= _VASTEST)


# --- windows ---


def companions(bars: Sequence[Bar]) -> tuple[tuple[Bar, ...], ...]:
    """Split *bars* into groups that share an even axis well, shortest times first.

    Bars that are zero or endless throughout fit any axis and go with the longest times.
    """
    sized = [(values, bar) for bar in bars if (values := tuple(v for v in finite((bar,)) if v >= _TINIEST))]
    groups: list[list[Bar]] = []
    least = 0.0
    for values, bar in sorted(sized, key=lambda item: max(item[0])):
        if not groups or max(values) > _LINEAR_REACH * least:
            groups.append([])
            least = min(values)
        groups[-1].append(bar)
        least = min(least, *values)
    rest = [bar for bar in bars if not any(bar is other for _, other in sized)]
    groups = [*groups[:-1], groups[-1] + rest] if groups else [rest]
    return tuple(tuple(bar for bar in bars if any(bar is b for b in group)) for group in groups if group)


def windows_chart(key: str, title: str, bars: Sequence[Bar], tick_s: float) -> Markup:
    """Draw windows on one time axis, with the zones *never*, *either*, *always* and the tick to scale.

    Args:
        key: unique in the page.
        tick_s: the port's tick, seconds.
    """
    drawing = Drawing(key, title, _describe(bars, "s"))
    scale = time_scale(finite(bars), tick_s)
    bottom = _TOP + _ROW * len(bars) + 4
    draw_axis(drawing, scale, _TOP, bottom)
    _draw_tick_line(drawing, scale, tick_s, bottom)
    for k, bar in enumerate(bars):
        y = _TOP + k * _ROW
        _draw_label(drawing, bar, y)
        _draw_zones(drawing, scale, bar, y)
        _draw_bar(drawing, scale, bar, y)
        _draw_tick(drawing, scale, bar, tick_s, y)
    _legend(drawing, bottom + 40, _WINDOW_LEGEND)
    return drawing.markup(bottom + 56)


def time_scale(values: Sequence[float], tick_s: float) -> Scale:
    """Return an axis for times and one tick: even, or by decades where the times lie far apart."""
    above = [v for v in values if v >= _TINIEST]
    if above and (max(above) > _LINEAR_REACH * min(above) or tick_s > _LINEAR_REACH * max(above)):
        return log_scale([*above, max(tick_s, _TINIEST)], _GUTTER, _RIGHT, "s")
    high = max([*(1.2 * v for v in above), 6 * tick_s, _TINIEST])
    return Scale(0.0, high, _GUTTER, _RIGHT, "s")


def _draw_tick_line(drawing: Drawing, scale: Scale, tick_s: float, bottom: float) -> None:
    x = scale(tick_s)
    if scale.start + 3 < x < scale.end - 3:
        drawing.line(x, _TOP - 4, x, bottom, "tick-line")
    axis = f"{'logarithmic' if scale.log else 'linear'} time axis"
    drawing.text(0, bottom + 15, axis, "small faint", fit=_GUTTER - 40)


def _draw_zones(drawing: Drawing, scale: Scale, bar: Bar, y: float) -> None:
    least, most = scale(bar.outer.least), scale(bar.outer.most)
    drawing.line(scale.start, y + 43, least, y + 43, "zone-never")
    drawing.line(least, y + 43, most, y + 43, "zone-either")
    drawing.line(most, y + 43, scale.end, y + 43, "zone-always")
    for name, left, right in (
        ("never", scale.start, least),
        ("either", least, most),
        ("always", most, scale.end),
    ):
        if right - left >= CHARACTER * len(name) + 4:
            drawing.text((left + right) / 2, y + 56, name, "small middle")


def _draw_tick(drawing: Drawing, scale: Scale, bar: Bar, tick_s: float, y: float) -> None:
    """Draw one tick as long as it is on this axis, from the nominal value on."""
    nominal = bar.parts.nominal
    if nominal is None or not math.isfinite(nominal):
        return
    left, right = scale(nominal), scale(nominal + tick_s)
    drawing.rect(left, y + 33, max(right - left, 1.2), 4, "tick-bar")


_WINDOW_LEGEND = (
    ("nominal", "nominal"),
    ("parts", "part tolerances"),
    ("guaranteed", "guaranteed by the data sheet"),
    ("tick-bar", "one tick of the port"),
)


_MARGIN_LEGEND = _WINDOW_LEGEND[:3]
_LEVEL_LEGEND = (("nominal", "nominal"), ("parts", "least to most"))


# --- volts ---


def levels_chart(key: str, title: str, bars: Sequence[Bar], top_v: float) -> Markup:
    """Draw voltages on one axis from 0 to at least *top_v* volt."""
    values = (*finite(bars), top_v, 0.0)
    return _volts_chart(key, title, bars, min(values), max(values), zero=False)


def margins_chart(key: str, title: str, bars: Sequence[Bar]) -> Markup:
    """Draw margins round zero; left of the zero line a margin is on the wrong side."""
    values = (*finite(bars), 0.0)
    return _volts_chart(key, title, bars, min(values), max(values), zero=True)


def _volts_chart(key: str, title: str, bars: Sequence[Bar], low: float, high: float, *, zero: bool) -> Markup:
    drawing = Drawing(key, title, _describe(bars, "V"))
    room = max((high - low) * 0.06, 1e-3)
    scale = Scale(low - room * (low < 0), high + room, _GUTTER, _RIGHT, "V")
    row_height = 44.0
    bottom = _TOP + row_height * len(bars) + 4
    if zero and scale(0.0) > scale.start:
        drawing.hatch(scale.start, _TOP - 8, scale(0.0) - scale.start, bottom - _TOP + 8, "wrong", 9)
        drawing.text(scale.start, _TOP - 12, "wrong side", "small")
    draw_axis(drawing, scale, _TOP, bottom)
    if zero:
        drawing.line(scale(0.0), _TOP - 8, scale(0.0), bottom, "zero")
    for k, bar in enumerate(bars):
        _draw_label(drawing, bar, _TOP + k * row_height)
        _draw_bar(drawing, scale, bar, _TOP + k * row_height)
    _legend(drawing, bottom + 40, _MARGIN_LEGEND if zero else _LEVEL_LEGEND)
    return drawing.markup(bottom + 56)


# --- shared ---


def _draw_label(drawing: Drawing, bar: Bar, y: float) -> None:
    drawing.text(0, y + 22, bar.label, fit=_GUTTER - 8)
    drawing.text(0, y + 36, bar.under, "small faint", fit=_GUTTER - 8)


def _draw_bar(drawing: Drawing, scale: Scale, bar: Bar, y: float) -> None:
    narrow = bar.parts
    if bar.guaranteed is not None:
        left, right = scale(bar.guaranteed.least), scale(bar.guaranteed.most)
        drawing.rect(left, y + 15, right - left, 16, "guaranteed")
        drawing.hatch(left, y + 15, right - left, 16, "guaranteed-hatch", 5)
    if bar.outer.most is None:
        drawing.path(((scale.end, y + 15), (scale.end + 10, y + 23), (scale.end, y + 31)), "endless")
        if scale(narrow.nominal) < scale.end - 110:
            drawing.text(scale.end, y + 9, "to never", "small end")
    left, right = scale(narrow.least), scale(narrow.most)
    drawing.rect(left, y + 18, right - left, 10, "parts")
    x = scale(narrow.nominal)
    drawing.line(x, y + 12, x, y + 32, "nominal")
    text = quantity(narrow.nominal, scale.unit)
    half = CHARACTER * len(text) / 2
    drawing.text(min(max(x, scale.start + half), scale.end - half), y + 9, text, "middle strong")


def _legend(drawing: Drawing, y: float, entries: Sequence[tuple[str, str]]) -> None:
    x = _GUTTER
    for style, text in entries:
        if style == "nominal":
            drawing.line(x + 9, y - 11, x + 9, y + 3, style)
        elif style == "tick-bar":
            drawing.rect(x, y - 6, 18, 4, style)
        else:
            drawing.rect(x, y - 10, 18, 12, style)
        if style == "guaranteed":
            drawing.hatch(x, y - 10, 18, 12, "guaranteed-hatch", 5)
        drawing.text(x + 24, y, text, "small")
        x += 24 + 6.0 * len(text) + 18


def _describe(bars: Sequence[Bar], unit: str) -> str:
    return " ".join(_describe_bar(bar, unit) for bar in bars)


def _describe_bar(bar: Bar, unit: str) -> str:
    nominal = quantity(bar.parts.nominal, unit)
    name = f"{bar.label}, {bar.under}" if bar.under else bar.label
    guaranteed = f"; guaranteed {band_range(bar.guaranteed, unit)}" if bar.guaranteed is not None else ""
    return f"{name}: {nominal}; over the parts {band_range(bar.parts, unit)}{guaranteed}."
