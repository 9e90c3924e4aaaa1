"""A run of the circuit, and of the port beside it, as values to look at."""

from collections.abc import Mapping
from dataclasses import dataclass

#: Changes of a two-valued signal: ``((time_s, level), ...)``; the first entry is at time 0.
Changes = tuple[tuple[float, int], ...]


@dataclass(frozen=True, slots=True)
class Wave:
    """A node's voltage, sampled: `times_s` and `volts` have the same length."""

    name: str
    times_s: tuple[float, ...]
    volts: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Trace:
    """What happened from 0 to `end_s`.

    Args:
        title: one line on what is shown.
        buttons: per button, 1 = pressed.
        circuit: per output of the spec, 1 = active, as the circuit does it.
        port: the same as the port does it, None where no port was run.
        latch: the timer's own output, 1 = high.
        waves: node voltages of interest (capacitor nodes and timer inputs).
        levels: named constant voltages to draw as lines (thresholds), volt.
    """

    title: str
    end_s: float
    buttons: Mapping[str, Changes]
    circuit: Mapping[str, Changes]
    port: Mapping[str, Changes] | None
    latch: Changes
    waves: tuple[Wave, ...] = ()
    levels: tuple[tuple[str, float], ...] = ()
