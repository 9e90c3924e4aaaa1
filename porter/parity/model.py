"""What was proved about a port, as values."""

from dataclasses import dataclass
from typing import Literal

RowVerdict = Literal["same", "tighter", "differs"]


@dataclass(frozen=True, slots=True)
class Closure:
    """The walk over every reachable state.

    Args:
        states: reachable port states; steps: state-input pairs looked at.
        grey: pairs in which a deciding voltage is within `bound_v` of its threshold.
        bound_v: how far a capacitor copy can be from the true voltage, for ever; None = no copies.
        complete: True where the walk came to a fixed point and the bound holds for any length.
        differs: pairs that decide differently outside the bound.
        said: what was proved, in plain sentences.
    """

    states: int
    steps: int
    grey: int
    bound_v: float | None
    complete: bool
    differs: int
    said: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Sequences:
    """The literal enumeration: all sequences of `depth` held combinations, each lasting `stride` ticks."""

    depth: int
    count: int
    differences: int
    grey: int
    strides: tuple[int, ...]


@dataclass(frozen=True, slots=True)
class LedgerRow:
    """One aspect of behaviour, circuit against port.

    `differs` fails the proof until `accepted` carries the reason.
    """

    row: str
    circuit: str
    port: str
    verdict: RowVerdict
    accepted: str | None


@dataclass(frozen=True, slots=True)
class Parity:
    """The verdict; `counterexample` is a list of (tick, held names) changes, or None."""

    verdict: Literal["same", "within", "differs"]
    style: str
    tick_s: float
    closure: Closure
    sequences: Sequences
    ledger: tuple[LedgerRow, ...]
    counterexample: tuple[tuple[int, tuple[str, ...]], ...] | None
    statement: str  # "same", "same with n accepted deviations", "differs", in a sentence
