"""The findings: what is wrong with a drawing, with the failing inequality and a way to mend it."""

from collections.abc import Iterator
from dataclasses import dataclass

from porter.behaviour.corner import Population
from porter.behaviour.measure import Measures
from porter.behaviour.model import Behaviour
from porter.circuit.engine import Engine
from porter.findings import Finding
from porter.spec.model import Circuit


@dataclass(frozen=True, slots=True)
class Evidence:
    """What the rules look at: the circuit and everything measured on it."""

    circuit: Circuit
    engine: Engine
    nominal: Measures
    drawn: Population
    published: Population
    behaviour: Behaviour


def find(evidence: Evidence) -> Iterator[Finding]:
    """Yield the findings of every rule."""
    yield from ()
