"""What a circuit really does: the rows of `derive`, as values."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

from porter.findings import Finding

Level = Literal["low", "high"]
#: ``keeps``: whichever it was before.
Settled = Literal["low", "high", "oscillates", "keeps"]
WindowKind = Literal["shortest-press", "re-arm-after-tap", "re-arm-after-hold", "stray-gap"]
#: ``either``: some allowed units do it, others don't.
Corners = Literal["same", "either"]
Verdict = Literal["sound", "typical-only", "faulty"]


@dataclass(frozen=True, slots=True)
class Band:
    """A derived quantity over the corners; None = never (an infinite window)."""

    nominal: float | None
    least: float | None
    most: float | None


@dataclass(frozen=True, slots=True)
class HeldRow:
    """From a settled output, with `held` pressed together: the output once settled.

    `corners`: whether every unit within the part tolerances does the same; `guaranteed`: the same
    with the family's published figures as well.
    """

    held: tuple[str, ...]
    start: Level
    output: Settled
    period_s: float | None
    corners: Corners = "same"
    guaranteed: Corners = "same"


@dataclass(frozen=True, slots=True)
class PriorityRow:
    """Two or more buttons held: the output and the button whose command wins (None: neither alone)."""

    held: tuple[str, ...]
    output: Settled
    winner: str | None


@dataclass(frozen=True, slots=True)
class ReleaseRow:
    """All of `held` pressed together, then released in `order`: the final output."""

    held: tuple[str, ...]
    order: tuple[str, ...]
    output: Settled


@dataclass(frozen=True, slots=True)
class PowerOn:
    """The output after the supply steps up; `output` is ``undetermined`` where nothing forces it.

    `corners`, `guaranteed`: whether every unit does the same, as in `HeldRow`.
    """

    output: Literal["low", "high", "undetermined"]
    why: str
    corners: Corners = "same"
    guaranteed: Corners = "same"


@dataclass(frozen=True, slots=True)
class PowerRow:
    """What comes of one course of the supply (nominal unit).

    Args:
        profile: the course in words, such as ``ramp 1 ms`` or ``dropout 10 ms``.
        start: the output before, None where the supply comes up over empty capacitors.
        held: the buttons held all the while.
        output: the output once settled; ``undetermined`` where nothing forces the latch.
        why: which input forces it and when, or that none does.
        port: what the port does there after its own reset.
    """

    profile: str
    start: Level | None
    held: tuple[str, ...]
    output: Literal["low", "high", "oscillates", "undetermined"]
    why: str
    port: str


@dataclass(frozen=True, slots=True)
class Window:
    """A time window of a button; `start` is the output that the press in question would change.

    `seconds`: over the part tolerances with typical timer figures.
    `guaranteed`: the same with the family's published least and most figures as well.
    `why`: formula and the parts it came from.
    """

    button: str
    start: Level
    window: WindowKind
    seconds: Band
    guaranteed: Band
    why: str = ""


@dataclass(frozen=True, slots=True)
class Timed:
    """After a quick press (40 ms) of a button the output stays at `output` by itself for this long, then returns."""

    button: str
    output: Level
    seconds: Band
    guaranteed: Band


@dataclass(frozen=True, slots=True)
class Margin:
    """How far a deciding voltage is from its threshold in a settled situation; negative = wrong side.

    `volts` over the part tolerances, `guaranteed` with the family's published spread as well.
    """

    where: str
    volts: Band
    guaranteed: Band
    why: str = ""


@dataclass(frozen=True, slots=True)
class NamedLevel:
    """A voltage that a reader wants to see: idle level, thresholds, output levels."""

    name: str
    volts: Band


@dataclass(frozen=True, slots=True)
class TimerFigure:
    """One figure of the fitted timer at the spec's supply, and where it comes from.

    Args:
        unit: ``V``, ``A``, ``ohm``, ``s`` or empty for a ratio.
        source: the documents, or the line of the spec that overrides the family.
    """

    name: str
    least: float
    typical: float
    most: float
    unit: str
    source: str
    overridden: bool


@dataclass(frozen=True, slots=True)
class Behaviour:
    """Everything that `derive` found."""

    circuit: str
    buttons: tuple[str, ...]
    verdict: Verdict
    held: tuple[HeldRow, ...]
    priority: tuple[PriorityRow, ...]
    dominance: str  # "reset-dominant", "set-dominant" or "" where neither applies
    releases: tuple[ReleaseRow, ...]
    power_on: PowerOn
    windows: tuple[Window, ...]
    margins: tuple[Margin, ...]
    levels: tuple[NamedLevel, ...]
    findings: tuple[Finding, ...]
    notes: tuple[str, ...] = ()  # e.g. how the corners were chosen
    power: tuple[PowerRow, ...] = ()
    figures: tuple[TimerFigure, ...] = ()
    timed: tuple[Timed, ...] = ()
    extra: Mapping[str, object] = field(default_factory=dict)
