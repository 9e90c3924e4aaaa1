"""A port and a walk over its states in plain Python, one state at a time: what a loop would cost."""

from collections.abc import Callable, Iterable

from porter.port.model import Charge, ChargeMode, Move, Port, Test

Step = Callable[[int, int, int], tuple[int, int]]


def _holds(tests: Iterable[Test], X: int) -> bool:
    return any(X >= t.limit if t.ge else X <= t.limit for t in tests)


def _flips(mode: ChargeMode, X: int) -> bool:
    return _holds(mode.force, X) or (_holds(mode.flips, X) and not _holds(mode.blocks, X))


def _mover(move: Move) -> Callable[[int], int]:
    """Return a move as a function of one number, as C would have it."""
    end, rate, shift, add, only = move.end, move.rate, move.shift, move.add, move.only
    if move.kind == "hold":
        return lambda X: X
    if move.kind == "jump":
        return lambda _: end
    far: Callable[[int], int] = {
        "scale": lambda X: (X * rate >> 16) + add,
        "drain": lambda X: X - (X >> shift) + add,
        "shift": lambda X: (
            X + (((end - X) + (1 << shift >> 1)) >> shift)
            if X < end
            else X - (((X - end) + (1 << shift >> 1)) >> shift)
        ),
        "multiply": lambda X: (
            X + (((end - X) * rate + 32768) >> 16) if X < end else X - (((X - end) * rate + 32768) >> 16)
        ),
    }[move.kind]

    def one_way(X: int) -> int:
        return far(X) if (X < end if only == "up" else X > end) else X

    return far if only == "both" else one_way


def step_of(port: Port) -> Step:
    """Return the step of a port of one copy: ``(q, X, held) -> (q, X)``."""
    assert isinstance(port.machine, Charge)
    modes = port.machine.modes
    movers = [[_mirrored(mode.moves[0]) for mode in row] for row in modes]

    def step(q: int, X: int, held: int) -> tuple[int, int]:
        if _flips(modes[q][held], X) and not _flips(modes[1 - q][held], X):
            q = 1 - q
        return q, movers[q][held](X)

    return step


def _mirrored(move: Move) -> Callable[[int], int]:
    plain = _mover(move)
    return (lambda X: 65535 - plain(65535 - X)) if move.mirror else plain
