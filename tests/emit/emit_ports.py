"""Ports made by hand, and strategies that make more: what the planner could hand to the emit room."""

from dataclasses import replace
from functools import cache
from itertools import pairwise, product

import numpy as np
from hypothesis import strategies as st

from porter.port.model import Charge, ChargeMode, Constant, Count, Move, Port, Test, Toggle
from porter.port.step import run
from porter.vectors.model import Case, Suite

WORDS = ("SET", "CLEAR", "MODE", "STOP")
HOLD = Move("hold", 0)


def port(
    name, machine, buttons, *, start_q=0, answer=None, outputs=("lamp",), constants=(), title="A test latch"
):
    """Return a port around *machine*; the answer is the latch unless told otherwise."""
    width = 1 << len(buttons)
    return Port(
        name=name,
        title=title,
        spec_file=f"{name}.yaml",
        spec_sha256="0" * 64,
        buttons=tuple(buttons),
        outputs=tuple(outputs),
        tick_s=1e-3,
        style="charge" if isinstance(machine, Charge) else "count",
        start_q=start_q,
        answer=answer or ((0,) * width, (1,) * width),
        machine=machine,
        constants=tuple(constants),
        why=("Made by hand for a test.",),
    )


def two_button():
    """A latch with a button each way; reset wins."""
    table = ((0, 1, 0, 0), (1, 1, 0, 0))
    return port("lamp_latch", Count(table, (False,) * 4, (1, 1), (1, 1), None), ("SET", "CLEAR"))


def filtered(press=5, release=5):
    """The same with both buttons agreeing over some ticks."""
    table = ((0, 1, 0, 0), (1, 1, 0, 0))
    return port(
        "pump_latch", Count(table, (False,) * 4, (press,) * 2, (release,) * 2, None), ("SET", "CLEAR")
    )


def toggle_count():
    """One button that turns the latch, filtered, with two re-arm windows."""
    machine = Count(((0, 0), (1, 1)), (True, True), (5,), (1,), Toggle(0, (110, 110), (40, 40), (1, 1)))
    return port("stair_toggle", machine, ("PUSH",))


def toggle_sides():
    """A toggle that differs by side, with a clear button over it."""
    toggle = Toggle(0, (20, 31), (7, 9), (3, 1))
    machine = Count(((0, 0, 0, 0), (1, 1, 0, 0)), (True, True, False, False), (1, 3), (2, 2), toggle)
    return port(
        "desk_toggle",
        machine,
        ("PUSH", "CLEAR"),
        answer=((0, 0, 2, 2), (1, 1, 3, 3)),
        outputs=("lamp", "busy"),
    )


def _one_cap(open_moves, held_moves, name, low=40000, high=20000):
    flip = (Test((1,), True, low),), (Test((1,), False, high),)
    modes = tuple((ChargeMode((), (open_moves[q],)), ChargeMode(flip[q], (held_moves[q],))) for q in (0, 1))
    start = open_moves[0].end
    constants = [
        Constant(
            "start.0", start, "Copy of the memory at power-on", f"0 V / 0.1 mV = {start}", f"{name}.yaml:3"
        ),
        Constant("flip.q0.h1.0.limit", low, "Upper threshold", "2/3 * 65536", f"{name}.yaml:4"),
        Constant(
            "move.q1.h1.0.end", held_moves[1].end, "Held level", "12 V * 10k/(10k + 5k)", f"{name}.yaml:6"
        ),
    ]
    charge = Charge(("mem",), (0.0,), (1e-4,), (start,), modes)
    return port(name, charge, ("PUSH",), constants=constants)


def toggle_shift():
    """The one-button circuit with decays that are powers of two."""
    opened = (Move("shift", 65000, 8), Move("shift", 300, 8))
    held = (Move("shift", 36000, 3), Move("shift", 26000, 3))
    return _one_cap(opened, held, "memo_toggle")


def toggle_multiply():
    """The one-button circuit with any decays."""
    opened = (Move("multiply", 65000, rate=170), Move("multiply", 300, rate=170))
    held = (Move("multiply", 36000, rate=9000), Move("multiply", 26000, rate=9000))
    return _one_cap(opened, held, "rate_toggle")


def _upside_down(name, opened, held):
    """The one-button circuit with both sides alike: the copy counts from the rail that is driven."""
    flip = (Test((1,), False, 21845),), (Test((1,), True, 43690),)
    modes = tuple(
        (
            ChargeMode((), (replace(opened, mirror=q == 1),)),
            ChargeMode(flip[q], (replace(held, mirror=q == 1),)),
        )
        for q in (0, 1)
    )
    return port(name, Charge(("mem",), (0.0,), (1e-4,), (0,), modes), ("PUSH",))


def toggle_drain():
    """Both sides alike, decays that are powers of two."""
    return _upside_down("soft_toggle", Move("drain", 0, 8), Move("drain", 31507, 3, add=3939))


def toggle_scale():
    """Both sides alike, any decays."""
    return _upside_down(
        "even_toggle", Move("scale", 0, rate=64668), Move("scale", 31507, rate=46337, add=9230)
    )


def one_way():
    """Scales and drains that a rectifier stops, beside kinds that know their distance."""
    low = ChargeMode((Test((1,), True, 60000),), (Move("scale", 123, rate=64905, add=1, only="down"),))
    pressed = ChargeMode((Test((1,), True, 60000),), (Move("drain", 65000, 5, add=2031, only="up"),))
    high = ChargeMode((Test((1,), False, 9000),), (Move("multiply", 300, rate=800),))
    return port(
        "sink_latch", Charge(("mem",), (0.0,), (1e-4,), (50000,), ((low, pressed), (high, high))), ("PUSH",)
    )


def two_caps():
    """Two capacitors that share modes."""
    ends = (50000, 40000)
    mixed = ChargeMode(
        (Test((3, -2), True, 60000),),
        (Move("mix", 50000, keep=(65000, 300), ends=ends), Move("mix", 40000, keep=(-200, 65536), ends=ends)),
    )
    loose = ChargeMode(
        (Test((3, -2), False, 5000),), (Move("shift", 100, 5), Move("multiply", 65535, rate=900))
    )
    jump = ChargeMode((), (Move("jump", 12345), HOLD))
    charge = Charge(
        ("mem", "filter-gnd"), (0.0, 0.0), (1e-4, 1e-4), (0, 65535), ((mixed, jump), (loose, mixed))
    )
    return port("pair_latch", charge, ("PUSH",))


HAND_MADE = (
    two_button,
    filtered,
    toggle_count,
    toggle_sides,
    toggle_shift,
    toggle_multiply,
    toggle_drain,
    toggle_scale,
    one_way,
    two_caps,
)


def stimulus(made: Port, ticks: int, seed: int) -> np.ndarray:
    """Return random presses of very different lengths, shape (ticks,)."""
    random = np.random.default_rng(seed)
    held = np.empty(ticks, np.int64)
    at = 0
    while at < ticks:
        length = int(np.exp(random.uniform(0, 6)))
        held[at : at + length] = random.integers(made.held_count)
        at += length
    return held


@cache
def suite(made: Port, ticks: int = 600, cases: int = 2) -> Suite:
    """Return a suite whose answers are the reference's."""
    return Suite(
        made.name,
        made.title,
        made.buttons,
        made.outputs,
        made.tick_s,
        tuple(_case(made, stimulus(made, ticks, seed), seed) for seed in range(cases)),
        ("Made for a test.",),
    )


def _case(made: Port, held: np.ndarray, seed: int) -> Case:
    answers = run(made, held[None, :])[0]
    return Case(f"random_{seed}", "Random presses.", _runs(held), _runs(answers))


def _runs(values: np.ndarray) -> tuple[tuple[int, int], ...]:
    edges = np.flatnonzero(np.diff(values)) + 1
    starts = np.concatenate([[0], edges, [len(values)]])
    return tuple((int(b - a), int(values[a])) for a, b in pairwise(starts))


# --- strategies ---


@st.composite
def count_ports(draw, most_buttons: int = 4) -> Port:
    """Ports of the count style, sensible or not."""
    n = draw(st.integers(1, most_buttons))
    width = 1 << n
    bits = st.tuples(*[st.integers(0, 1)] * width)
    ticks = st.tuples(*[st.integers(1, 9)] * n)
    sides = lambda least, most: st.tuples(st.integers(least, most), st.integers(least, most))  # noqa: E731
    most = draw(st.sampled_from((12, 300)))
    toggle = draw(
        st.none() | st.builds(Toggle, st.integers(0, n - 1), sides(0, most), sides(0, most), sides(0, most))
    )
    live = draw(st.tuples(*[st.booleans()] * width))
    machine = Count((draw(bits), draw(bits)), live, draw(ticks), draw(ticks), toggle)
    return _dressed(draw, machine, n)


def _dressed(draw, machine, n: int) -> Port:
    outputs = draw(st.integers(1, 2))
    row = st.tuples(*[st.integers(0, (1 << outputs) - 1)] * (1 << n))
    return port(
        "any_latch",
        machine,
        WORDS[:n],
        start_q=draw(st.integers(0, 1)),
        answer=(draw(row), draw(row)),
        outputs=("lamp", "fan")[:outputs],
    )


COPY = st.one_of(st.sampled_from((0, 1, 127, 32768, 65408, 65535)), st.integers(0, 65535))


ONLY = st.sampled_from(("both", "both", "up", "down"))


def _move(caps: int) -> st.SearchStrategy[Move]:
    plain = st.one_of(
        st.just(HOLD),
        st.builds(Move, st.just("jump"), COPY),
        st.builds(
            lambda end, shift, only: Move("shift", end, shift, only=only), COPY, st.integers(0, 15), ONLY
        ),
        st.builds(
            lambda end, rate, only: Move("multiply", end, rate=rate, only=only),
            COPY,
            st.integers(1, 65535),
            ONLY,
        ),
    )
    plain = st.one_of(plain, _affine())
    if caps == 1:
        return plain
    keep = st.one_of(st.sampled_from((0, 65536)), st.integers(-65535, 65535))
    mix = st.builds(
        lambda end, keeps, ends: Move("mix", end, keep=keeps, ends=ends),
        COPY,
        st.tuples(*[keep] * caps),
        st.tuples(*[COPY] * caps),
    )
    return st.one_of(plain, mix)


@st.composite
def _affine(draw) -> Move:
    """A scale or a drain that keeps every copy within its range."""
    if draw(st.booleans()):
        rate = draw(st.one_of(st.sampled_from((0, 65535)), st.integers(0, 65535)))
        add = draw(st.integers(0, 65535 - (65535 * rate >> 16)))
        return Move("scale", draw(COPY), rate=rate, add=add, only=draw(ONLY))
    shift = draw(st.integers(1, 15))
    return Move("drain", draw(COPY), shift, add=draw(st.integers(0, 65535 >> shift)), only=draw(ONLY))


def _mirrored(mode: ChargeMode) -> ChargeMode:
    moves = tuple(replace(m, mirror=True) if m.kind in ("scale", "drain") else m for m in mode.moves)
    return replace(mode, moves=moves)


def _test(caps: int) -> st.SearchStrategy[Test]:
    if caps == 1:
        return st.builds(Test, st.just((1,)), st.booleans(), COPY)
    most = 32767 // caps
    coeff = st.tuples(*[st.integers(-most, most)] * caps)
    one = st.builds(
        lambda k, c: tuple(c * (j == k) for j in range(caps)),
        st.integers(0, caps - 1),
        st.integers(-most, most),
    )
    many = st.builds(Test, coeff, st.booleans(), st.integers(-(10**8), 10**8))
    return st.one_of(many, st.builds(Test, one, st.booleans(), st.integers(-70000, 70000)))


@st.composite
def charge_ports(draw, most_caps: int = 3) -> Port:
    """Ports of the charge style with every kind of move, sensible or not."""
    n, caps = draw(st.integers(1, 3)), draw(st.integers(1, most_caps))
    # A few modes used over and over, as in real ports, so that merging has something to do.
    mode = st.builds(
        ChargeMode,
        st.lists(_test(caps), max_size=2).map(tuple),
        st.tuples(*[_move(caps)] * caps),
        st.lists(_test(caps), max_size=1).map(tuple),
        st.lists(_test(caps), max_size=2).map(tuple),
    )
    pool = st.sampled_from(draw(st.lists(mode, min_size=1, max_size=4)))
    half = st.tuples(*[pool] * (1 << n))
    start, low, high = draw(st.tuples(*[COPY] * caps)), draw(half), draw(half)
    if caps == 1 and draw(st.booleans()):
        high = tuple(map(_mirrored, high))
    charge = Charge(tuple(f"node{k}" for k in range(caps)), (0.0,) * caps, (1e-4,) * caps, start, (low, high))
    return _dressed(draw, charge, n)


def corners(made: Port) -> list[tuple[int, int]]:
    """Return every (latch, held) of a port."""
    return list(product((0, 1), range(made.held_count)))
