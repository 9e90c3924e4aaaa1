"""What the rules are given."""

from dataclasses import dataclass

from porter.behaviour.corner import Population
from porter.behaviour.measure import Measures
from porter.behaviour.model import Behaviour
from porter.circuit.engine import Engine
from porter.spec.model import Circuit


@dataclass(frozen=True, slots=True)
class Evidence:
    """What the rules look at: the circuit and everything measured on it.

    Args:
        engine: of the nominal unit alone; nominal: its measurements.
        drawn, published: the units that stand for all, see `population`.
        behaviour: what was derived so far, without findings.
    """

    circuit: Circuit
    engine: Engine
    nominal: Measures
    drawn: Population
    published: Population
    behaviour: Behaviour
