"""What a backend is given: an emitted core, and a stimulus as one row of bytes with its answers."""

from collections.abc import Iterable
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from porter.emit import emit
from porter.port.model import Port
from porter.vectors.model import Suite

#: In a stimulus: start again from power-on. Ends a stimulus in the drivers that can't ask for its length.
INIT, END = 0xFF, 0xFE
#: Added to a held mask: ask whether the core is idle. Added to the answer: it is.
ASK, IDLE = 0x40, 0x80
#: Ticks that are kept of a run once the core rests in it: more than an 8-bit count holds.
KEPT = 300

Bytes = NDArray[np.uint8]


@dataclass(frozen=True, slots=True)
class Work:
    """A core, what it is driven with, and what it must answer.

    Args:
        port: where the core came from.
        texts: the emitted files by bare name.
        stimulus: a byte a tick, `INIT` before each case; shape (n,).
        expected: the reference's output bits a tick, `INIT` at each `INIT`; shape (n,).
    """

    port: Port
    texts: dict[str, str]
    stimulus: Bytes
    expected: Bytes

    @property
    def name(self) -> str:
        """The core's name, such as ``lamp_latch``."""
        return self.port.name

    def write(self, where: Path) -> None:
        """Write the core's header and source."""
        for suffix in (".h", ".c"):
            (where / f"{self.name}{suffix}").write_text(self.texts[f"{self.name}{suffix}"])


def work(port: Port, suite: Suite) -> Work:
    """Return the work for every case of a suite, one after the other, asking for idle at every tick."""
    assert len(port.buttons) < 6 and len(port.outputs) < 7, "the drivers' marks need room beside the masks"
    texts = {Path(path).name: text for path, text in emit(port, suite).items()}
    stimulus = np.concatenate([_case(case.held) for case in suite.cases])
    expected = np.concatenate([_case(case.expected) for case in suite.cases])
    return Work(port, texts, np.where(stimulus == INIT, INIT, stimulus | ASK).astype(np.uint8), expected)


def _case(runs: Iterable[tuple[int, int]]) -> Bytes:
    ticks, values = np.array(tuple(runs), np.int64).T
    return np.repeat(np.append(INIT, values), np.append(1, ticks)).astype(np.uint8)


def without_rest(whole: Work, answers: bytes) -> Work:
    """Return the work with long rests cut short, for emulators that take a millisecond a tick.

    Every case with every change in it stays. Of the ticks in which the core, by *answers* of
    another backend to the whole work, is at rest with the same buttons held, the first `KEPT` stay:
    the step is a function of state and buttons alone, so the rest repeats the last. Idle is asked
    for where its answer turns and at every 16th tick.
    """
    rests = (np.frombuffer(answers, np.uint8) & IDLE != 0) & (whole.stimulus != INIT)
    same = np.append(False, whole.stimulus[1:] == whole.stimulus[:-1])
    at = np.arange(len(rests))
    since = at - np.maximum.accumulate(np.where(rests & same, 0, at))
    asks = (
        (at % 16 == 0) | np.append(False, rests[1:] != rests[:-1]) | np.append(rests[1:] != rests[:-1], True)
    )
    stimulus = np.where(asks | (whole.stimulus == INIT), whole.stimulus, whole.stimulus & ~np.uint8(ASK))
    keep = since <= KEPT
    return replace(whole, stimulus=stimulus[keep], expected=whole.expected[keep])


def outputs(answers: Bytes) -> Bytes:
    """Return answers without what the core said about being idle, marks left alone."""
    return np.where(answers == INIT, answers, answers & (IDLE - 1)).astype(np.uint8)


def rests(asked: Work, answers: bytes) -> Bytes:
    """Return for each tick at which the work asks for it whether the core is idle."""
    where = (asked.stimulus != INIT) & (asked.stimulus & ASK != 0)
    return np.frombuffer(answers, np.uint8)[where] & IDLE


def first_difference(asked: Work, answers: bytes) -> str | None:
    """Return what differs first from the reference, or None.

    A short answer is a difference: an emulator that ends early must not pass.
    """
    if len(answers) != len(asked.expected):
        return f"{asked.name}: {len(answers)} answers to {len(asked.expected)} ticks"
    got = outputs(np.frombuffer(answers, np.uint8))
    wrong = np.flatnonzero(got != asked.expected)
    if not len(wrong):
        return None
    at = int(wrong[0])
    starts = np.flatnonzero(asked.stimulus[: at + 1] == INIT)
    case, tick, held = len(starts) - 1, at - starts[-1] - 1, asked.stimulus[at] & (ASK - 1)
    return (
        f"{asked.name}: case {case}, tick {tick}, held {held}: expected {asked.expected[at]}, got {got[at]}"
    )
