"""Small ports and behaviours built by hand, for the tests of the vectors room."""

from hypothesis import strategies as st

from porter.behaviour.model import Band, Behaviour, Level, PowerOn, Window, WindowKind
from porter.port.model import Charge, ChargeMode, Count, Move, Port, Test, Toggle

Rows = list[tuple[str, Level, WindowKind, float | None]]


def behaviour(buttons: tuple[str, ...], windows: Rows | None = None) -> Behaviour:
    """Return a behaviour of which only the buttons and windows matter here."""
    rows = tuple(Window(b, start, kind, Band(t, t, t), Band(t, t, t)) for b, start, kind, t in windows or [])
    power = PowerOn("low", "")
    return Behaviour("by hand", buttons, "sound", (), (), "", (), power, rows, (), (), ())


def port(buttons: tuple[str, ...], machine: Count | Charge, **other: object) -> Port:
    """Return a port of one output, the latch itself, unless told otherwise."""
    n = 1 << len(buttons)
    style = "count" if isinstance(machine, Count) else "charge"
    fields: dict[str, object] = {
        "outputs": ("lamp",),
        "tick_s": 0.001,
        "start_q": 0,
        "answer": ((0,) * n, (1,) * n),
    }
    return Port(
        name="by_hand",
        title="By hand",
        spec_file="by_hand.yaml",
        spec_sha256="0" * 64,
        buttons=buttons,
        style=style,
        machine=machine,
        constants=(),
        why=(),
        **(fields | other),
    )


def latch(press: tuple[int, int] = (1, 1), release: tuple[int, int] = (1, 1)) -> Port:
    """Return a two-button latch in which CLEAR wins."""
    table = ((0, 1, 0, 0), (1, 1, 0, 0))
    return port(("SET", "CLEAR"), Count(table, (False,) * 4, press, release, None))


def toggle(press: int = 3, release: int = 2, tap=(11, 9), hold=(5, 4), pace=(1, 1)) -> Port:
    """Return a one-button toggle with re-arm."""
    counters = Toggle(0, tap, hold, pace)
    return port(("PUSH",), Count(((0, 0), (1, 1)), (True, True), (press,), (release,), counters))


def toggle_and_clear() -> Port:
    """Return a toggle beside a button that clears and overrides it."""
    counters = Toggle(0, (11, 9), (5, 4), (1, 1))
    table = ((0, 0, 0, 0), (1, 1, 0, 0))
    return port(("PUSH", "CLEAR"), Count(table, (True, True, False, False), (3, 1), (2, 1), counters))


def three_buttons() -> Port:
    """Return a latch of A (sets), B (clears and wins) and C (does nothing)."""
    table = ((0, 1, 0, 0, 0, 1, 0, 0), (1, 1, 0, 0, 1, 1, 0, 0))
    return port(("A", "B", "C"), Count(table, (False,) * 8, (2, 1, 1), (1, 1, 3), None))


def charge(rate: int = 6520, held_rate: int = 30000) -> Port:
    """Return a one-button toggle of the charge style with ideal rails: thresholds at thirds."""

    def mode(q: int, held: int) -> ChargeMode:
        flips = (Test((1,), True, 43690) if q else Test((1,), False, 21845),)
        if held:
            return ChargeMode(flips, (Move("multiply", 34328 if q else 31207, rate=held_rate),))
        return ChargeMode((), (Move("multiply", 65535 if q else 0, rate=rate),))

    modes = tuple(tuple(mode(q, held) for held in range(2)) for q in range(2))
    return port(("PUSH",), Charge(("memory",), (0.0,), (5 / 65535,), (0,), (modes[0], modes[1])))


def one_shot() -> Port:
    """Return a port whose button starts an output that ends by itself."""
    fill = (Move("jump", 0),)
    rise = (Move("multiply", 65535, rate=4000),)
    end = (Test((1,), True, 43690),)
    start = ChargeMode((Test((1,), True, 0),), fill)
    modes = ((ChargeMode((), fill), start), (ChargeMode(end, rise), ChargeMode((), rise)))
    return port(("GO",), Charge(("timing",), (0.0,), (1.0,), (0,), modes))


def oscillator() -> Port:
    """Return a port that flips every tick while its button is held."""
    stay = ChargeMode((), (Move("hold", 0),))
    low = ChargeMode((Test((1,), False, 0),), (Move("jump", 0),))
    high = ChargeMode((Test((1,), True, 9),), (Move("jump", 9),))
    return port(("RUN",), Charge(("c",), (0.0,), (1.0,), (0,), ((stay, low), (stay, high))))


@st.composite
def count_ports(draw: st.DrawFn) -> Port:
    """Draw a small count port of one to three buttons, any tables, with or without a toggle."""
    buttons = ("A", "B", "C")[: draw(st.integers(1, 3))]
    n, few = 1 << len(buttons), st.integers(1, 3)
    row = st.tuples(*[st.integers(0, 1)] * n)
    times = st.tuples(*[few] * len(buttons))
    pair = st.tuples(st.integers(0, 4), st.integers(0, 4))
    toggles = st.builds(Toggle, st.integers(0, len(buttons) - 1), pair, pair, st.tuples(few, few))
    machine = Count(
        draw(st.tuples(row, row)),
        draw(st.tuples(*[st.booleans()] * n)),
        draw(times),
        draw(times),
        draw(st.none() | toggles),
    )
    bits = st.tuples(*[st.integers(0, 3)] * n)
    return port(
        buttons,
        machine,
        outputs=("x", "y"),
        answer=draw(st.tuples(bits, bits)),
        start_q=draw(st.integers(0, 1)),
    )
