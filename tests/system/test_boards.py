"""Whole images on emulated parts: buttons moved at the port's pins, outputs read from its port register."""

from itertools import groupby
from pathlib import Path

import numpy as np
import pytest
from backends.boards import Moves, run_avr, run_m0
from backends.rows import agreeing_latch, latch, shift_charge, suite, window_toggle
from backends.work import work

from porter.port.model import Port
from porter.port.step import run
from porter.vectors.drive import drive

pytestmark = pytest.mark.system

PORTS = pytest.mark.parametrize(
    "port", [latch(), agreeing_latch(), window_toggle(), shift_charge()], ids=lambda p: p.name
)
TICK_US = 1_000
#: Firmware settles for 3 ms with the buttons up first: the emulator's first timer tick after boot is off.
QUIET_US = 3_000


def presses(port: Port, until_us: int, seed: int, start_us: int = 0) -> Moves:
    """Return presses and releases at odd microseconds, from some ticks to some hundred apart."""
    random = np.random.default_rng(seed)
    moves, now, held = [], start_us + QUIET_US, 0
    while now < start_us + until_us:
        now += int(np.exp(random.uniform(np.log(4_000), np.log(500_000))))
        held ^= 1 << int(random.integers(len(port.buttons)))
        moves.append((now, held))
    return moves


def changes(times_us: list[int], bits: list[int]) -> list[tuple[int, int]]:
    """Return time and value of each change, the first included."""
    return [next(group) for _, group in groupby(zip(times_us, bits, strict=True), key=lambda row: row[1])]


def reference(port: Port, moves: Moves, phase_us: int, until_us: int) -> list[tuple[int, int]]:
    """Return the port's changes where it samples every tick from *phase_us* on."""
    at = np.arange(phase_us, until_us, TICK_US)
    place = np.searchsorted([time for time, _ in moves], at, side="right") - 1
    masks = np.array([0, *(mask for _, mask in moves)])[place + 1]
    runs = tuple((len(tuple(group)), int(mask)) for mask, group in groupby(masks))
    (answer,), _ = drive(port, [runs])
    starts = np.cumsum([0, *(ticks for ticks, _ in answer)])[:-1]
    return [(int(at[start]), bits) for start, (_, bits) in zip(starts, answer, strict=True)]


@PORTS
def test_avr_image_does_what_the_reference_does(port: Port, tmp_path: Path):
    """An ATtiny85's output pin changes as the reference's does, later by a tick of sampling at most."""
    moves = _clear_moves(port)
    end = moves[-1][0] + 20_000
    seen = [
        (time, level) for time, output, level in run_avr(work(port, suite(port, 200, 1)), moves, tmp_path)
    ]
    due = reference(port, moves, 0, end)
    assert [level for _, level in seen] == [level for _, level in due] and len(due) > 5
    late = [time - when for (time, _), (when, _) in zip(seen[1:], due[1:], strict=True)]
    assert all(-TICK_US <= delay <= 1.5 * TICK_US for delay in late), late


def _clear_moves(port: Port) -> Moves:
    """Return presses to which the reference says the same wherever within a tick it samples.

    Otherwise a difference could be the sampling's. A wait for rest is in it: the part then sleeps,
    and its ticks begin anew.
    """
    for seed in range(200):
        moves = presses(port, 4_000_000, seed)
        end = moves[-1][0] + 20_000
        said = [reference(port, moves, phase, end) for phase in range(0, TICK_US, 250)]
        if len(said[0]) > 5 and len({tuple(level for _, level in rows) for rows in said}) == 1:
            return moves
    raise AssertionError("no clear presses found")


@PORTS
@pytest.mark.parametrize("start_us", [0, 2**32 - 2_000_000], ids=["from-zero", "timer-wraps"])
def test_m0_image_does_what_the_reference_does(port: Port, start_us: int, tmp_path: Path):
    """A Cortex-M0 samples once a tick, and its output pin shows the reference's answer to what it sampled.

    The second run starts two seconds before the microsecond counter wraps.
    """
    until = start_us + 5_000_000
    board = run_m0(
        work(port, suite(port, 200, 1)),
        presses(port, 5_000_000, 1, start_us),
        until,
        tmp_path,
        start_us=start_us,
    )
    samples = [next(group) for _, group in groupby(board.reads)]
    times, masks = zip(*samples, strict=True)
    assert set(np.diff(times)) == {TICK_US} and len(times) > 4_900
    answers = run(port, np.array(masks)[None, :])[0].tolist()
    shown = dict(board.writes)  # the last of each moment
    assert [shown[time] for time in times] == answers
    assert len(changes(list(times), answers)) > 5
