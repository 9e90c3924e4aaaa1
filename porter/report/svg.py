"""Drawing: elements, scales and text, for SVG inside the report.

Shapes carry class names, colours come from the page's style sheet, so that
the same drawing reads on paper, in light and in dark.
"""

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from xml.etree import ElementTree as ET

from markupsafe import Markup

from porter.report.numbers import quantity

#: Width of every drawing in its own units; one unit is a CSS pixel at full size.
WIDTH = 860.0
#: Roughly how wide a character of the drawing's text is; for fitting, not for measuring.
CHARACTER = 6.6

#: C0 and C1 controls, lone surrogates and non-characters: XML and HTML hold none of them.
_UNPRINTABLE = dict.fromkeys(
    (*range(32), *range(127, 160), *range(0xD800, 0xE000), 0xFFFE, 0xFFFF), "\N{REPLACEMENT CHARACTER}"
)
_LINES = {k: v for k, v in _UNPRINTABLE.items() if k not in (9, 10)}


def clean(text: str) -> str:
    """Replace the control characters that HTML and XML can't hold; line ends become blanks."""
    return " ".join(text.split("\n")).replace("\t", " ").translate(_UNPRINTABLE)


def clean_lines(text: str) -> str:
    """Do the same and keep line ends and tabs."""
    return text.replace("\r\n", "\n").translate(_LINES)


def px(value: float) -> str:
    """Return a length to a tenth of a pixel, without a trailing zero."""
    text = f"{value:.1f}"
    return "0" if text in ("-0.0", "0.0") else text.removesuffix(".0")


class Drawing:
    """One SVG picture; build it shape by shape and take `markup` at the end.

    Args:
        key: unique in the page; the title's and description's ids come from it.
        title, description: what a reader who can't see it is told.
    """

    def __init__(self, key: str, title: str, description: str, width: float = WIDTH) -> None:
        self.key, self.width = key, width
        self._root = ET.Element(
            "svg", {"class": "drawing", "role": "img", "aria-labelledby": f"{key}-title {key}-desc"}
        )
        ET.SubElement(self._root, "title", {"id": f"{key}-title"}).text = clean(title)
        ET.SubElement(self._root, "desc", {"id": f"{key}-desc"}).text = clean(description)

    def rect(self, x: float, y: float, width: float, height: float, style: str) -> None:
        """Add a rectangle; `style` holds class names."""
        place = {"x": px(x), "y": px(y), "width": px(max(width, 0)), "height": px(max(height, 0))}
        ET.SubElement(self._root, "rect", {"class": style, **place})

    def line(self, x1: float, y1: float, x2: float, y2: float, style: str) -> None:
        """Add a straight line."""
        ends = {"x1": px(x1), "y1": px(y1), "x2": px(x2), "y2": px(y2)}
        ET.SubElement(self._root, "line", {"class": style, **ends})

    def path(self, points: Iterable[tuple[float, float]], style: str) -> None:
        """Add a line through *points*; points that fall together on paper are dropped."""
        places = [f"{px(x)},{px(y)}" for x, y in points]
        kept = [p for i, p in enumerate(places) if i == 0 or p != places[i - 1]]
        ET.SubElement(self._root, "polyline", {"class": style, "points": " ".join(kept)})

    def text(self, x: float, y: float, text: str, style: str = "", *, fit: float | None = None) -> None:
        """Add text at its baseline; longer than *fit* pixels it's cut, and whole in its tooltip."""
        item = ET.SubElement(self._root, "text", {"x": px(x), "y": px(y)})
        if style:
            item.set("class", style)
        whole = clean(text)
        item.text = shorten(whole, fit) if fit else whole
        if item.text != whole:
            ET.SubElement(item, "title").text = whole

    def hatch(self, x: float, y: float, width: float, height: float, style: str, pitch: float = 6) -> None:
        """Fill a rectangle with slanting lines, to tell it from its neighbours without colour."""
        lines = min(int((width + height) / pitch) + 1, 400) if width > 0 else 0
        for step in range(1, lines):
            a = step * pitch
            x1, y1 = (x + a, y) if a <= width else (x + width, y + a - width)
            x2, y2 = (x, y + a) if a <= height else (x + a - height, y + height)
            self.line(x1, y1, x2, y2, style)

    def markup(self, height: float) -> Markup:
        """Return the picture, *height* tall, as markup that needs no escaping."""
        self._root.set("viewBox", f"0 0 {px(self.width)} {px(height)}")
        self._root.set("width", px(self.width))
        self._root.set("height", px(height))
        ET.indent(self._root, space=" ")
        return Markup(ET.tostring(self._root, encoding="unicode"))  # escaped by ElementTree


def shorten(text: str, fit: float) -> str:
    """Cut *text* to about *fit* pixels, with an ellipsis."""
    room = max(int(fit / CHARACTER), 2)
    return text if len(text) <= room else text[: room - 1] + "…"


# --- scales ---


@dataclass(frozen=True, slots=True)
class Scale:
    """A numeric axis: values `low` to `high` map to pixels `start` to `end`.

    A logarithmic scale needs ``0 < low``; anything lower, zero too, falls on its lower end.
    """

    low: float
    high: float
    start: float
    end: float
    unit: str
    log: bool = False

    def __call__(self, value: float | None) -> float:
        """Return the pixel of *value*, kept inside the axis; None (infinite) is the upper end."""
        if value is None or value >= self.high:
            return self.end
        if not value > self.low:  # what is no number lands here too
            return self.start
        if self.log:
            share = math.log(value / self.low) / math.log(self.high / self.low)
        else:
            share = (value - self.low) / (self.high - self.low)
        return self.start + share * (self.end - self.start)

    def ticks(self) -> tuple[tuple[float, str], ...]:
        """Return values to mark with their texts."""
        values = _log_ticks(self.low, self.high) if self.log else _even_ticks(self.low, self.high)
        return tuple((v, quantity(v, self.unit)) for v in values)


def _even_ticks(low: float, high: float, about: int = 8) -> tuple[float, ...]:
    step = nice_step((high - low) / about)
    first, last = math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)
    return tuple(k * step for k in range(first, last + 1))


def nice_step(step: float) -> float:
    """Return the least of the 1-2-5 series that isn't below *step* (*step* above zero)."""
    power = 10.0 ** math.floor(math.log10(step))
    return next((m * power for m in (1.0, 2.0, 5.0) if m * power >= step * (1 - 1e-9)), 10 * power)


def _log_ticks(low: float, high: float) -> tuple[float, ...]:
    first, last = math.ceil(math.log10(low) - 1e-9), math.floor(math.log10(high) + 1e-9)
    every = max(1, (last - first) // 8 + 1)
    return tuple(10.0**k for k in range(first, last + 1, every))


def log_scale(values: Sequence[float], start: float, end: float, unit: str) -> Scale:
    """Return a scale of whole decades round *values* (each above zero)."""
    low = 10.0 ** math.floor(math.log10(min(values) * 0.999))
    high = 10.0 ** math.ceil(math.log10(max(values) * 1.001))
    return Scale(low, high, start, end, unit, log=True)


def draw_axis(drawing: Drawing, scale: Scale, top: float, bottom: float) -> None:
    """Draw grid lines from *top* to *bottom* with their values beneath."""
    for value, text in scale.ticks():
        x = scale(value)
        drawing.line(x, top, x, bottom, "grid")
        drawing.text(x, bottom + 15, text, "small middle")
    drawing.line(scale.start, bottom, scale.end, bottom, "axis")
