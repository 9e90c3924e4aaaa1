"""Ports by hand with the behaviour of hand-written cores, whose sizes are the budgets; and runs for them."""

from dataclasses import replace
from itertools import pairwise

import numpy as np

from porter.port.model import Charge, ChargeMode, Count, Move, Port, Test, Toggle
from porter.vectors.drive import drive
from porter.vectors.model import Case, Suite

ONE, TWO = ("PUSH",), ("SET", "CLEAR")
RESET_WINS = ((0, 1, 0, 0), (1, 1, 0, 0))
KEEP = ((0, 0), (1, 1))


def _port(name: str, buttons: tuple[str, ...], machine: Count | Charge) -> Port:
    width = 1 << len(buttons)
    style = "charge" if isinstance(machine, Charge) else "count"
    answer = ((0,) * width, (1,) * width)
    about = (name, "A latch by hand", f"{name}.yaml", "0" * 64, buttons, ("lamp",), 1e-3, style, 0)
    return Port(*about, answer, machine, (), ())


def latch() -> Port:
    """Two buttons, reset wins, each tick as it is."""
    return _port("plain_latch", TWO, Count(RESET_WINS, (False,) * 4, (1, 1), (1, 1), None))


def agreeing_latch() -> Port:
    """Two buttons, reset wins, each button believed after 4 equal ticks."""
    return _port("agreeing_latch", TWO, Count(RESET_WINS, (False,) * 4, (4, 4), (4, 4), None))


def edge_toggle() -> Port:
    """One button that turns the latch; press and release believed after 4 equal ticks."""
    return _port("edge_toggle", ONE, Count(KEEP, (True,) * 2, (4,), (4,), Toggle(0, (0, 0), (1, 1), (1, 1))))


def window_toggle() -> Port:
    """One button that turns the latch after 5 held ticks, and again after 110 open ones."""
    toggle = Toggle(0, (110, 110), (110, 110), (0, 0))
    return _port("window_toggle", ONE, Count(KEEP, (True,) * 2, (5,), (1,), toggle))


def _charge(name: str, opened: tuple[Move, Move], held: tuple[Move, Move]) -> Port:
    low, high = Test((1,), False, 21845), Test((1,), True, 43690)
    modes = tuple((ChargeMode((), (opened[q],)), ChargeMode(((low, high)[q],), (held[q],))) for q in (0, 1))
    return _port(name, ONE, Charge(("memory",), (0.0,), (1e-4,), (0,), (modes[0], modes[1])))


def rails_charge() -> Port:
    """The memory goes to the driven rail by a 256th of its distance a tick, and stays while held."""
    stay = Move("hold", 0)
    return _charge("rails_charge", (Move("shift", 0, 8), Move("shift", 65535, 8)), (stay, stay))


def shift_charge() -> Port:
    """The same, and while held the memory goes to a level near the middle: all by powers of two."""
    opened = Move("shift", 0, 8), Move("shift", 65535, 8)
    return _charge("shift_charge", opened, (Move("shift", 31710, 2), Move("shift", 33825, 2)))


def multiply_charge() -> Port:
    """The same with any factors."""
    opened = Move("multiply", 0, rate=631), Move("multiply", 65535, rate=631)
    held = Move("multiply", 31710, rate=16662), Move("multiply", 33825, rate=16662)
    return _charge("multiply_charge", opened, held)


def _mirrored(name: str, opened: Move, held: Move) -> Port:
    """Return a port whose two sides work alike upside down, as the planner makes them where it can."""
    turned = [replace(move, mirror=True) for move in (opened, held)]
    return _charge(name, (opened, turned[0]), (held, turned[1]))


def drain_charge() -> Port:
    """As `shift_charge`, in the arithmetic that the planner takes where all decays are powers of two."""
    opened, held = Move("drain", 0, shift=8), Move("drain", 31708, shift=2, add=7927)
    return _mirrored("drain_charge", opened, held)


def scale_charge() -> Port:
    """As `multiply_charge`, in the arithmetic that the planner takes for other decays."""
    return _mirrored("scale_charge", Move("scale", 0, rate=64905), Move("scale", 31710, rate=48874, add=8062))


ROWS = (
    latch,
    agreeing_latch,
    edge_toggle,
    window_toggle,
    rails_charge,
    shift_charge,
    multiply_charge,
    drain_charge,
    scale_charge,
)


def suite(port: Port, ticks: int = 20_000, cases: int = 2) -> Suite:
    """Return random presses of very different lengths, with the reference's answers."""
    held = [_presses(port, ticks, seed) for seed in range(cases)]
    answers, _ = drive(port, held)
    made = tuple(
        Case(f"random_{i}", "Random presses.", h, a)
        for i, (h, a) in enumerate(zip(held, answers, strict=True))
    )
    return Suite(port.name, port.title, port.buttons, port.outputs, port.tick_s, made, ("Made for a test.",))


def _presses(port: Port, ticks: int, seed: int) -> tuple[tuple[int, int], ...]:
    random = np.random.default_rng(seed)
    lengths = np.exp(random.uniform(0, 8.2, ticks // 20)).astype(np.int64)
    edges = np.minimum(np.append(0, lengths.cumsum()), ticks)
    masks = random.integers(port.held_count, size=len(lengths))
    runs = [(int(b - a), int(m)) for (a, b), m in zip(pairwise(edges), masks, strict=True) if b > a]
    return tuple(runs)
