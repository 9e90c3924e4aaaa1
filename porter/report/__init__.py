"""The report: one self-contained HTML file that a change notice can rest on.

Everything in it has been computed elsewhere; this room arranges, words and
draws.  The page has no scripts and asks nothing of a network.
"""

from collections.abc import Mapping, Sequence
from importlib.metadata import PackageNotFoundError, version
from types import MappingProxyType

from markupsafe import Markup, escape

from porter.behaviour.model import Behaviour
from porter.parity.model import Parity
from porter.port.model import Port
from porter.report.conduct import (
    held_section,
    memory_section,
    power_on_section,
    priority_section,
    timing_section,
    volts_section,
    windows_section,
)
from porter.report.drawing import circuit_section
from porter.report.firmware import Size, evidence_section, firmware_section
from porter.report.interface import interface_section
from porter.report.page import Section
from porter.report.proof import deviations_section, ledger_section, parity_section, vectors_section
from porter.report.svg import clean_lines
from porter.report.verdict import cautions_section, findings_section, title_block, verdict_section
from porter.resources import environment
from porter.sheet.model import Sheet
from porter.spec.model import Circuit
from porter.trace import Trace
from porter.vectors.model import Suite

__all__ = ["Size", "own_version", "render"]

_NOTHING: Mapping[str, str] = MappingProxyType({})


def own_version() -> Mapping[str, str]:
    """Return porter's own name and version; nothing where it runs without being installed."""
    try:
        return {"porter": version("porter")}
    except PackageNotFoundError:
        return _NOTHING


def render(
    circuit: Circuit,
    behaviour: Behaviour,
    port: Port,
    parity: Parity,
    suite: Suite,
    files: Mapping[str, str],
    traces: Sequence[Trace],
    sizes: Sequence[Size] = (),
    versions: Mapping[str, str] | None = None,
    sheet: Sheet | None = None,
) -> str:
    """Return ``report.html`` as text.

    Args:
        files: path in the job folder to text; all are hashed, the firmware's cores are printed.
        traces: runs to draw; those with waves show the memory, the others the timing.
        sizes: measured sizes of the core, if any.
        versions: what made the job; None = porter's own version only.
        sheet: the interface sheet, if it is to be part of the report.
    """
    made = own_version() if versions is None else versions
    sections = (
        verdict_section(circuit, behaviour, port, parity),
        findings_section(behaviour),
        circuit_section(circuit),
        held_section(behaviour),
        priority_section(behaviour),
        power_on_section(circuit, behaviour, port),
        windows_section(behaviour, port.tick_s),
        volts_section(circuit, behaviour),
        memory_section(traces, port.tick_s),
        timing_section(traces, port.tick_s),
        ledger_section(parity),
        deviations_section(circuit, parity),
        parity_section(parity),
        vectors_section(suite),
        firmware_section(circuit, port, files, sizes),
        *([interface_section(sheet)] if sheet else []),
        evidence_section(port, circuit, files, made),
        cautions_section(circuit),
    )
    return _page(circuit.title, sections, title_block=title_block(circuit, port, made))


def _page(title: str, sections: Sequence[Section], **more: object) -> str:
    templates = environment().overlay(finalize=_finished)
    templates.filters["quoted"] = quoted
    return templates.get_template("report.html.j2").render(title=title, sections=sections, **more)


def quoted(text: str) -> Markup:
    """Return a finding's text escaped, with what stands between backticks set as code."""
    pieces = [escape(clean_lines(piece)) for piece in text.split("`")]
    if len(pieces) % 2 == 0:  # an odd backtick is no quotation mark
        return escape(clean_lines(text))
    code = Markup("<code>{}</code>")
    return Markup("").join(code.format(piece) if k % 2 else piece for k, piece in enumerate(pieces))


def _finished(value: object) -> object:
    """Pass on finished text only: a forgotten None must not reach the page."""
    if isinstance(value, Markup):
        return value
    if isinstance(value, str):
        return clean_lines(value)
    if isinstance(value, int) and not isinstance(value, bool):
        return str(value)
    raise TypeError(f"not finished text: {value!r}")
