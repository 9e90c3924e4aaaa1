"""Which style is taken, and why."""

import pytest

import porter
from porter.port.model import Port
from porter.resources import resource
from porter.spec.model import Circuit
from porter.spec.read import read_text


def circuit(name: str, style: str) -> Circuit:
    """A shipped spec with another wish for its style."""
    text = resource(f"specs/{name}.yaml").read_text("utf-8")
    lines = [line for line in text.splitlines() if not line.startswith("  style:")]
    lines.insert(lines.index("port:") + 1, f"  style: {style}")
    return read_text("\n".join(lines) + "\n", f"{name}.yaml")


def planned(name: str, style: str) -> tuple[Circuit, Port]:
    drawn = circuit(name, style)
    return drawn, porter.plan(drawn, porter.derive(drawn))


def test_auto_counts_where_its_differences_lie_inside_the_family() -> None:
    """And the proof agrees: what the planner asked is what the proof asks."""
    drawn, port = planned("aquarium_light", "auto")
    assert port.style == "count" and "inside the spread" in port.why[0]
    assert porter.prove(drawn, port).verdict == "within"


def test_auto_takes_charge_where_counters_do_what_no_unit_does() -> None:
    _, port = planned("bench_fan", "auto")
    assert port.style == "charge" and "no allowed unit" in port.why[0]


def test_counters_asked_for_beyond_the_family_are_refuted() -> None:
    drawn, port = planned("bench_fan", "count")
    parity = porter.prove(drawn, port)
    assert (port.style, parity.verdict) == ("count", "differs")
    assert parity.counterexample


@pytest.mark.parametrize("name", ["kiln_vent", "plant_mister"])
def test_auto_counts_where_only_the_latch_remembers(name: str) -> None:
    _, port = planned(name, "auto")
    assert port.style == "count"


def test_a_timed_output_can_only_be_carried() -> None:
    _, port = planned("soap_dose", "count")
    assert port.style == "charge" and "although" in port.why[0]
