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
        band_s: how much earlier or later than the nominal circuit a grey decision can make the
            output turn, None = no grey ones; spread_s: by how much two allowed units differ there.
    """

    states: int
    steps: int
    grey: int
    bound_v: float | None
    complete: bool
    differs: int
    said: tuple[str, ...]
    band_s: float | None = None
    spread_s: float | None = None


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
class FamilyCheck:
    """The port against units that span the family, through many press sequences.

    Args:
        sequences, units, clocks: how many of each were run (clocks: real tick in nominal ticks).
        always, either: edges that every unit has, and that some have, over all sequences.
        violations: sequences in which the port does what no allowed unit does.
        witness: held masks per tick of the shortest such sequence, None = none.
        said: in plain words.
    """

    sequences: int
    units: int
    clocks: tuple[float, ...]
    always: int
    either: int
    violations: int
    witness: tuple[int, ...] | None
    said: str


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
    family: FamilyCheck | None = None
    clocks: tuple[tuple[float, Closure], ...] = ()  # the closure with the clock at each end of its tolerance
