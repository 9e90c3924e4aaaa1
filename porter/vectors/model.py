"""Test vectors: cases with a purpose, each a run of ticks from power-on."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Case:
    """One run from power-on.

    Args:
        name: unique in the suite, an identifier such as ``both_held_release_set_first``.
        purpose: what it is there to show, one sentence.
        held: run-length coded stimulus, ``((ticks, held mask), ...)``, every ticks >= 1.
        expected: run-length coded answer, ``((ticks, output bits), ...)``, same total.
    """

    name: str
    purpose: str
    held: tuple[tuple[int, int], ...]
    expected: tuple[tuple[int, int], ...]

    @property
    def ticks(self) -> int:
        """Length in ticks."""
        return sum(ticks for ticks, _ in self.held)


@dataclass(frozen=True, slots=True)
class Suite:
    """All cases for one port, in a fixed order; `guarantees` says what the suite is sure to find."""

    name: str
    title: str
    buttons: tuple[str, ...]
    outputs: tuple[str, ...]
    tick_s: float
    cases: tuple[Case, ...]
    guarantees: tuple[str, ...] = ()
