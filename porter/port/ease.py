"""The cheapest arithmetic for a copy's motion: one multiplication or one shift a tick, and as few numbers as fit.

In one tick a copy truly goes from ``X`` to ``end + (X - end) * stays``.  That is a share of ``X`` and a
constant; written so (``scale``, and ``drain`` where the share is a power of two) it needs neither the
distance nor its sign.  Both constants are whole numbers, chosen so that the most that a tick can be
wrong over all copies is least; modes share theirs where that costs no more than `MOST`.
"""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from porter.circuit.values import Floats
from porter.port.model import U16, Move

#: A tick may be off by so many copies where modes share numbers; 1 is reached without sharing.
MOST = 1.5
_ALL = np.arange(U16 + 1, dtype=np.int64)
_WAYS = {"both": "both", "up": "down", "down": "up"}


@dataclass(frozen=True, slots=True)
class Flow:
    """The true motion of one copy in one mode, for one tick.

    Args:
        stays: the share of the distance from `end` that is left after a tick, 0..1.
        end: where the copy settles, in copies; end_v: in volt; rate: of the decay, 1/s.
    """

    q: int
    held: int
    at: int
    stays: float
    end: float
    end_v: float
    rate: float
    only: str

    @property
    def key(self) -> str:
        """Where in the port the move stands."""
        return f"move.q{self.q}.h{self.held}.{self.at}"


@dataclass(frozen=True, slots=True)
class Eased:
    """A flow in whole numbers; `off` is the most that a tick is wrong, in copies."""

    flow: Flow
    move: Move
    off: float


@dataclass(frozen=True, slots=True)
class _Kept:
    """What stays of each copy before anything is added, and how much can be added."""

    kind: Literal["scale", "drain"]
    number: int
    kept: Floats

    @property
    def room(self) -> int:
        return U16 - int(self.kept[-1])


def ease(flows: Sequence[Flow], mirrored: bool) -> list[Eased]:
    """Choose the moves of one copy.

    Args:
        flows: of all modes in which it moves by decay.
        mirrored: with the latch at 1 the move is made with 65535 less the copy.
    """
    drains = _group_all(flows, mirrored, _shifts)
    if drains and max(each.off for each in drains) <= MOST:
        return drains
    return _group_all(flows, mirrored, _scales)


def distinct(eased: Sequence[Eased]) -> int:
    """Count the different numbers, and the modes that act alike whatever the latch is."""
    moves = [(e.flow.at, e.move.kind, e.move.rate, e.move.shift, e.move.add) for e in eased]
    sides = {(e.flow.at, e.flow.held, *move[1:]) for e, move in zip(eased, moves, strict=True)}
    return len(set(moves)) + len(sides)


def said(eased: Sequence[Eased], mirrored: bool, scale_v: Floats) -> list[str]:
    """Return sentences on what was chosen, with what it costs."""
    if not eased:
        return []
    worst = max(eased, key=lambda each: each.off * float(scale_v[each.flow.at]))
    how = "a shift" if all(e.move.kind == "drain" for e in eased) else "one multiplication"
    sentences = [
        f"moves a copy by {how} and a constant; a tick is off by at most {worst.off:.2f} copies "
        f"({worst.off * float(scale_v[worst.flow.at]) * 1e6:.3g} µV), modes that share a number included"
    ]
    if mirrored:
        sentences.append(
            "keeps 65535 less the copy while the latch is set: both sides then share their limits and rates"
        )
    return sentences


def _group_all(flows: Sequence[Flow], mirrored: bool, kind: "_Candidates") -> list[Eased]:
    """Ease mode by mode of the buttons: both sides of the latch together where possible."""
    eased: list[Eased] = []
    for stays in _alike(flows):
        group = [flow for flow in flows if stays[0] <= flow.stays <= stays[1]]
        eased += _group(group, mirrored, kind)
    return eased


def _alike(flows: Iterable[Flow]) -> list[tuple[float, float]]:
    """Return ranges of shares so near each other that one number may do for all in it."""
    ranges: list[tuple[float, float]] = []
    for stays in sorted({flow.stays for flow in flows}):
        if ranges and stays - ranges[-1][0] < 2 / 65536:
            ranges[-1] = (ranges[-1][0], stays)
        else:
            ranges.append((stays, stays))
    return ranges


def _group(group: list[Flow], mirrored: bool, kind: "_Candidates") -> list[Eased]:
    """Try one share and one constant, then one share, then each for itself."""
    kept = [
        k for number in dict.fromkeys(n for f in group for n in kind.numbers(f)) for k in [kind.kept(number)]
    ]
    if not kept:
        return []
    together = min((_together(group, k, mirrored) for k in kept), key=_worst)
    if _worst(together) <= MOST:
        return together
    one = min(([_alone(flow, k, mirrored) for flow in group] for k in kept), key=_worst)
    if _worst(one) <= MOST:
        return one
    return [min((_alone(f, k, mirrored) for k in kept), key=lambda each: each.off) for f in group]


def _worst(eased: list[Eased]) -> float:
    return max(each.off for each in eased)


def _together(group: list[Flow], kept: _Kept, mirrored: bool) -> list[Eased]:
    spans = [_span(flow, kept, mirrored) for flow in group]
    add, off = _centre(min(s[0] for s in spans), max(s[1] for s in spans), kept.room)
    return [Eased(flow, _move(flow, kept, add, mirrored), off) for flow in group]


def _alone(flow: Flow, kept: _Kept, mirrored: bool) -> Eased:
    add, off = _centre(*_span(flow, kept, mirrored), kept.room)
    return Eased(flow, _move(flow, kept, add, mirrored), off)


def _span(flow: Flow, kept: _Kept, mirrored: bool) -> tuple[float, float]:
    """Return the least and most that is missing before the constant, over the copies that move."""
    end, only = _there(flow, mirrored)
    missing = end + (_ALL - end) * flow.stays - kept.kept
    moves = {"both": _ALL >= 0, "up": _ALL < end, "down": _ALL > end}[only]
    return float(missing[moves].min()), float(missing[moves].max())


def _there(flow: Flow, mirrored: bool) -> tuple[float, str]:
    """Return end and way of a flow for the copy as the move sees it."""
    turned = mirrored and flow.q == 1
    return (U16 - flow.end, _WAYS[flow.only]) if turned else (flow.end, flow.only)


def _centre(least: float, most: float, room: int) -> tuple[int, float]:
    """Return the constant between two bounds, and how far off it leaves them; none where none is needed."""
    add = int(np.clip(round((least + most) / 2), 0, room))
    add = 0 if max(-least, most) <= MOST else add
    return add, max(add - least, most - add)


def _move(flow: Flow, kept: _Kept, add: int, mirrored: bool) -> Move:
    end, only = _there(flow, mirrored)
    to = int(np.clip(round(end), 0, U16))
    numbers = {"rate": kept.number} if kept.kind == "scale" else {"shift": kept.number}
    return Move(kept.kind, to, only=only, add=add, mirror=mirrored and flow.q == 1, **numbers)  # type: ignore[arg-type]


class _Candidates:
    """The numbers that a kind of move could use for a flow, and what each keeps of every copy."""

    def numbers(self, flow: Flow) -> list[int]:
        """Return the whole numbers on both sides of the true one."""
        raise NotImplementedError

    def kept(self, number: int) -> _Kept:
        """Return what stays of every copy."""
        raise NotImplementedError


class _Scales(_Candidates):
    def numbers(self, flow: Flow) -> list[int]:
        exact = flow.stays * 65536
        return [n for n in (int(np.floor(exact)), int(np.ceil(exact))) if n <= U16]

    def kept(self, number: int) -> _Kept:
        return _Kept("scale", number, (_ALL * number >> 16).astype(float))


class _Shifts(_Candidates):
    def numbers(self, flow: Flow) -> list[int]:
        share = 1 - flow.stays
        shift = round(-np.log2(share)) if share > 0 else 0
        return [int(shift)] if 1 <= shift <= 15 else []

    def kept(self, number: int) -> _Kept:
        return _Kept("drain", number, (_ALL - (_ALL >> number)).astype(float))


_scales, _shifts = _Scales(), _Shifts()
