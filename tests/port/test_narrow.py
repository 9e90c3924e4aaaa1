"""A decision that only a sliver of the memory's range leads to is planned as the circuit makes it."""

import numpy as np

import porter
from porter.circuit.engine import Engine
from porter.port.memory import memory
from porter.port.model import Charge, State
from porter.port.swift import decider
from porter.spec.model import Circuit
from porter.spec.read import read_text

SPEC = """\
circuit: Toggle whose reset follows the memory
supply: 5 V
timer:
  family: cmos
  pins: {trigger: inputs, threshold: inputs, reset: memory, output: out}
  values: {reset_level: 1.661 V, trigger_ratio: 1/3}
parts:
  R1: {resistor: 10k, between: [vcc, inputs]}
  R2: {resistor: 10k, between: [inputs, gnd]}
  R3: {resistor: 100k, between: [out, memory]}
  C1: {capacitor: 1u, between: [memory, gnd]}
buttons:
  B: {between: [memory, inputs]}
port: {tick: 1 ms, style: charge, power_on: low}
"""


def truth(circuit: Circuit, q: int, held: int, copies: np.ndarray) -> np.ndarray:
    """The circuit's latch at this instant, asked copy by copy."""
    mem = memory(Engine(circuit))
    lanes = mem.lanes(q, held, copies[:, None])
    mem.engine.resolve(lanes)
    return lanes.q


def test_a_sliver_between_reset_and_trigger_is_planned() -> None:
    """With the button held the trigger wins only between the reset level and a third: 75 copies of 65,536."""
    circuit = read_text(SPEC, "narrow.yaml")
    port = porter.plan(circuit, porter.derive(circuit))
    assert isinstance(port.machine, Charge)
    copies = np.arange(65536)
    expected = truth(circuit, 0, 1, copies)
    assert 0 < expected.sum() < 200
    state = State(np.zeros(65536, np.uint8), copies[:, None])
    np.testing.assert_array_equal(decider(port)(state, np.ones(65536, np.int64)), expected)
