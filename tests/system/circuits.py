"""One circuit of each kind, planned once for a session."""

from collections.abc import Callable
from functools import lru_cache
from pathlib import Path

from backends.rows import shift_charge, suite

import porter
from porter.port.model import Port
from porter.port.plan import plan
from porter.vectors import build_vectors
from porter.vectors.model import Suite

SPECS = Path(porter.__file__).parents[1] / "specs"
#: Each kind's spec, and what is replaced in its text.
KINDS = {
    "two_button": ("kiln_vent", ("", "")),
    "charge_multiply": ("map_lamp", ("", "")),
    "forced_count": ("map_lamp", ("tick: 1 ms", "tick: 1 ms\n  style: count")),
    "one_shot": ("soap_dose", ("", "")),
    "two_capacitors": ("wash_door", ("", "")),
}
BY_HAND: dict[str, Callable[[], Port]] = {"charge_shift": shift_charge}
ALL = (*KINDS, *BY_HAND)


@lru_cache(maxsize=len(ALL))
def planned(kind: str, folder: Path) -> tuple[Port, Suite]:
    """Return port and suite of a kind of circuit; *folder* takes the changed spec."""
    if kind in BY_HAND:
        port = BY_HAND[kind]()
        return port, suite(port)
    name, (old, new) = KINDS[kind]
    text = (SPECS / f"{name}.yaml").read_text("utf-8")
    assert old in text
    spec = folder / f"{name}.yaml"
    spec.write_text(text.replace(old, new) if old else text, "utf-8")
    circuit = porter.read(spec)
    behaviour = porter.derive(circuit)
    port = plan(circuit, behaviour)
    return port, build_vectors(behaviour, port)
