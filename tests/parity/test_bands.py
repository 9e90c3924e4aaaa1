"""Three bands over random toggles: the planned port keeps within them, one that re-arms outside of them does not."""

from dataclasses import replace
from typing import NamedTuple

import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st

import porter
from porter.behaviour.model import Behaviour
from porter.circuit.engine import Engine
from porter.parity.family import PortMachine, check_family, set_stages
from porter.port.charge import plan_charge
from porter.port.memory import memory
from porter.port.model import Port
from porter.port.plan import plan
from porter.spec.model import Circuit
from porter.spec.read import read_text

TOGGLE = """
circuit: Some toggle
supply: {supply} V ±{spread}%
timer:
  family: cmos
  pins: {{trigger: inputs, threshold: inputs, reset: vcc, output: out}}
parts:
  R1: {{resistor: {top}k ±{spread}%, between: [vcc, inputs]}}
  R2: {{resistor: {bottom}k ±{spread}%, between: [inputs, gnd]}}
  R3: {{resistor: {feed}k ±{spread}%, between: [out, memory]}}
  C1: {{capacitor: {farads}u ±{spread}%, between: [memory, gnd]}}
buttons:
  PUSH: {{between: [memory, inputs]}}
outputs:
  lamp: {{high: out}}
port:
  style: charge
  clock: ±{clock}%
"""


class Made(NamedTuple):
    """A circuit with what was derived and planned; without a long repr."""

    circuit: Circuit
    behaviour: Behaviour
    port: Port

    def __repr__(self) -> str:
        return f"<{self.circuit.source}>"


@st.composite
def toggles(draw) -> Made:
    """One-button toggles of sensible values that work, with the port planned for each."""
    halves, spread = draw(st.integers(8, 24)), draw(st.sampled_from([1, 2, 5]))
    text = TOGGLE.format(
        supply=draw(st.sampled_from([9, 12, 15])),
        spread=spread,
        top=halves,
        bottom=round(halves * draw(st.floats(0.9, 1.1)), 2),
        feed=draw(st.integers(12, 25)) * halves,
        farads=draw(st.sampled_from([0.22, 0.47, 1, 2.2])),
        # A clock that is off by more than resistor and capacitor together can leave the family.
        clock=draw(st.sampled_from([1, spread])),
    )
    circuit = read_text(text, "some.yaml")
    behaviour = porter.derive(circuit)
    assume(behaviour.verdict != "faulty")
    return Made(circuit, behaviour, plan(circuit, behaviour))


def check_bands(made: Made, outside: float) -> None:
    """The port as planned leaves no band; planned for another pace it re-arms outside of them, and does."""
    circuit, behaviour, port = made
    stages = set_stages(circuit, behaviour, PortMachine(port), start_q=port.start_q)

    def violations(some: Port) -> int:
        return check_family(
            circuit, behaviour, PortMachine(some), start_q=port.start_q, stages=stages
        ).violations

    machine, _, _ = plan_charge(circuit, memory(Engine(circuit)), port.tick_s * outside)
    assert violations(port) == 0
    assert violations(replace(port, machine=machine)) > 0


OUTSIDE = st.sampled_from([0.2, 5.0])


@settings(max_examples=1, suppress_health_check=list(HealthCheck))
@given(made=toggles(), outside=OUTSIDE)
def test_inside_never_outside_always(made, outside):
    """One toggle each time."""
    check_bands(made, outside)


@pytest.mark.long
@settings(max_examples=25, suppress_health_check=list(HealthCheck))
@given(made=toggles(), outside=OUTSIDE)
def test_inside_never_outside_always_for_many(made, outside):
    """More of them on request."""
    check_bands(made, outside)
