"""One circuit of each kind, planned once for a session."""

import re
from collections.abc import Callable
from functools import lru_cache
from pathlib import Path

from backends.rows import shift_charge, suite

import porter
from porter.port.model import Port
from porter.port.plan import plan
from porter.vectors import build_vectors
from porter.vectors.model import Suite

SPECS = Path(__file__).parents[2] / "specs"
#: Each kind's spec, and the style that is asked for in place of the spec's own.
KINDS = {
    "two_button": ("kiln_vent", "count"),
    "charge_multiply": ("map_lamp", "charge"),
    "forced_count": ("map_lamp", "count"),
    "one_shot": ("soap_dose", "auto"),
    "two_capacitors": ("wash_door", "auto"),
}
BY_HAND: dict[str, Callable[[], Port]] = {"charge_shift": shift_charge}
ALL = (*KINDS, *BY_HAND)


@lru_cache(maxsize=len(ALL))
def planned(kind: str, folder: Path) -> tuple[Port, Suite]:
    """Return port and suite of a kind of circuit; *folder* takes the changed spec."""
    if kind in BY_HAND:
        port = BY_HAND[kind]()
        return port, suite(port)
    name, style = KINDS[kind]
    text = re.sub(r"^  style:.*\n", "", (SPECS / f"{name}.yaml").read_text("utf-8"), flags=re.M)
    spec = folder / f"{name}.yaml"
    spec.write_text(re.sub(r"^port:\n", f"port:\n  style: {style}\n", text, flags=re.M), "utf-8")
    circuit = porter.read(spec)
    behaviour = porter.derive(circuit)
    port = plan(circuit, behaviour)
    assert style in (port.style, "auto")
    return port, build_vectors(behaviour, port)
