"""What a backend is given: an emitted core, and a stimulus as one row of bytes with its answers."""

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from porter.emit import emit
from porter.port.model import Port
from porter.vectors.model import Suite

#: In a stimulus: start again from power-on. Ends a stimulus in the drivers that can't ask for its length.
INIT, END = 0xFF, 0xFE
#: Added to an answer where the core says that it is idle.
IDLE = 0x80

Bytes = NDArray[np.uint8]


@dataclass(frozen=True, slots=True)
class Work:
    """A core, what it is driven with, and what it must answer.

    Args:
        port: where the core came from.
        texts: the emitted files by bare name.
        stimulus: a held mask a tick, `INIT` before each case.
        expected: the reference's output bits a tick, `INIT` at each `INIT`.
    """

    port: Port
    texts: dict[str, str]
    stimulus: bytes
    expected: bytes

    @property
    def name(self) -> str:
        """The core's name, such as ``lamp_latch``."""
        return self.port.name

    def write(self, where: Path) -> None:
        """Write the core's header and source."""
        for suffix in (".h", ".c"):
            (where / f"{self.name}{suffix}").write_text(self.texts[f"{self.name}{suffix}"])


def work(port: Port, suite: Suite) -> Work:
    """Return the work for every case of a suite, one after the other."""
    assert len(port.buttons) < 7 and len(port.outputs) < 7, "the drivers' marks need room beside the masks"
    texts = {Path(path).name: text for path, text in emit(port, suite).items()}
    stimulus = b"".join(_case(case.held) for case in suite.cases)
    expected = b"".join(_case(case.expected) for case in suite.cases)
    return Work(port, texts, stimulus, expected)


def _case(runs: Iterable[tuple[int, int]]) -> bytes:
    ticks, values = np.array(tuple(runs), np.int64).T
    return bytes([INIT]) + np.repeat(values.astype(np.uint8), ticks).tobytes()


def outputs(answers: bytes) -> Bytes:
    """Return answers without what the core said about being idle, marks left alone."""
    got = np.frombuffer(answers, np.uint8)
    return np.where(got == INIT, got, got & (IDLE - 1))


def first_difference(work: Work, answers: bytes) -> str | None:
    """Return what differs first from the reference, or None.

    A short answer is a difference: an emulator that ends early must not pass.
    """
    if len(answers) != len(work.expected):
        return f"{work.name}: {len(answers)} answers to {len(work.expected)} ticks"
    wrong = np.flatnonzero(outputs(answers) != np.frombuffer(work.expected, np.uint8))
    if not len(wrong):
        return None
    at = int(wrong[0])
    case = work.stimulus[: at + 1].count(INIT) - 1
    tick = at - work.stimulus.rindex(INIT, 0, at + 1) - 1
    got, due = answers[at] & (IDLE - 1), work.expected[at]
    return f"{work.name}: case {case}, tick {tick}, held {work.stimulus[at]}: expected {due}, got {got}"
