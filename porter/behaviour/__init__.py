"""What the circuit really does: held table, priority, releases, power-on, windows, margins, findings."""

from porter.behaviour.derive import derive
from porter.behaviour.model import Behaviour

__all__ = ["Behaviour", "derive"]
