"""porter: ports a timer-chip on/off latch to a small microcontroller and proves that nothing changes.

The public surface, for scripts and notebooks::

    circuit = porter.read("specs/quay_lamp.yaml")
    behaviour = porter.derive(circuit)

Names are loaded when first used, so that ``porter --help`` does not wait for numpy.
"""

from importlib import import_module

_HOMES = {
    "read": "porter.spec.read",
    "derive": "porter.behaviour.derive",
    "simulate": "porter.single_run",
    "plan": "porter.port.plan",
    "prove": "porter.parity.prove",
    "build_vectors": "porter.vectors",
    "emit": "porter.emit",
    "sheet": "porter.sheet",
}
__version__ = "0.1.0"
__all__ = ["build_vectors", "derive", "emit", "plan", "prove", "read", "sheet", "simulate"]


def __getattr__(name: str) -> object:
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'porter' has no attribute {name!r}")
