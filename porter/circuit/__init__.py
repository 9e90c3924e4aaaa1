"""The circuit solved: modes, exact flow, crossings, corners."""

from porter.circuit.engine import Engine, Lanes
from porter.circuit.values import Columns, columns, corners, samples

__all__ = ["Columns", "Engine", "Lanes", "columns", "corners", "samples"]
