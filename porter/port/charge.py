"""The charge style: an integer copy of each capacitor that matters, moved by the exact one-tick solution."""

from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise

import numpy as np

from porter.circuit.engine import Engine
from porter.circuit.network import Mode
from porter.circuit.values import Floats
from porter.port.decisions import decisions
from porter.port.ease import Eased, Flow, distinct, ease, said
from porter.port.memory import Memory, settled_mode
from porter.port.model import U16, Charge, ChargeMode, Constant, Move, Test
from porter.port.origin import Origin
from porter.spec.model import Circuit

ALWAYS = Test((1,), True, 0)


def plan_charge(circuit: Circuit, mem: Memory, tick_s: float) -> tuple[Charge, list[Constant], list[str]]:
    """Plan the charge machine of a circuit at a tick.

    Returns:
        The machine, its constants with their origins, and sentences on what was done.
    """
    masks = range(1 << len(circuit.buttons))
    origin = Origin(circuit, mem)
    planner = _Planner(mem, tick_s, origin)
    rows = [tuple(planner.mode(q, h) for h in masks) for q in (0, 1)]
    rows, eased = planner.eased(rows)
    start = _start_copies(mem)
    names = tuple(mem.engine.topo.state_names[k] for k in mem.kept)
    machine = Charge(names, tuple(mem.low_v.tolist()), tuple(mem.scale_v.tolist()), start, (rows[0], rows[1]))
    constants = [
        origin.constant(
            f"start.{k}",
            value,
            f"{names[k]} at power-on, capacitors empty",
            f"{mem.low_v[k] + value * mem.scale_v[k]:.6g} V",
            (),
        )
        for k, value in enumerate(start)
    ]
    return machine, constants + planner.constants, [*_said(mem), *eased]


def _said(mem: Memory) -> list[str]:
    names = [mem.engine.topo.state_names[k] for k in mem.kept]
    left = [n for k, n in enumerate(mem.engine.topo.state_names) if k not in mem.kept]
    said = [f"carries a 16-bit copy of the voltage at {', '.join(names)}"] if names else []
    if left:
        said.append(
            f"leaves out the charge at {', '.join(left)}: no decision depends on it once the supply is up"
        )
    return said


def _start_copies(mem: Memory) -> tuple[int, ...]:
    raw = mem.copies(mem.engine.empty(0).x)[0]
    return tuple(int(v) for v in np.clip(np.rint(raw), 0, U16))


class _Planner:
    """Plans mode by mode, collecting constants."""

    def __init__(self, mem: Memory, tick_s: float, origin: Origin) -> None:
        self.mem, self.tick_s, self.origin = mem, tick_s, origin
        self.constants: list[Constant] = []
        self.flows: list[Flow] = []

    def mode(self, q: int, held: int) -> ChargeMode:
        if len(self.mem.kept) == 1:
            force, flips, blocks = _line_tests(self.mem, q, held)
            moves: tuple[Move, ...] = (self._line_move(q, held),)
        else:
            mode = self._typical(q, held)
            force, flips, blocks = _plane_tests(self.mem, mode, q)
            moves = self._plane_moves(mode, q, held)
        self._flip_constants(q, held, (("force", force), ("flip", flips), ("block", blocks)))
        return ChargeMode(flips, moves, force, blocks)

    def _flip_constants(self, q: int, held: int, groups: tuple[tuple[str, tuple[Test, ...]], ...]) -> None:
        for name, tests in groups:
            for i, test in enumerate(tests):
                if test == ALWAYS:
                    continue
                key = f"{name}.q{q}.h{held}" + (f".{i}" if i else "") + ".limit"
                self.constants.append(self.origin.limit(key, test, q, held))

    def _typical(self, q: int, held: int) -> Mode:
        """The mode a state is in most of the time: the one its middle is in."""
        middle = self.mem.volts(np.full((1, len(self.mem.kept)), U16 / 2))[0]
        return settled_mode(self.mem.engine, q, held, middle)

    # --- one capacitor ---

    def _line_move(self, q: int, held: int) -> Move:
        engine, k = self.mem.engine, self.mem.kept[0]
        pieces = _pieces(self.mem, q, held)
        conducts, _, _ = max(pieces, key=lambda piece: piece[2] - piece[1])
        mode = engine.mode(q, held, conducts)
        rate, end_v = self._own(mode, k)
        only = _one_way(engine, pieces, q, held, k, conducts)
        end = float((end_v - self.mem.low_v[0]) / self.mem.scale_v[0])
        return self._round_move(q, held, 0, rate, end, end_v, only)

    def _own(self, mode: Mode, k: int) -> tuple[float, float]:
        """Rate (1/s) and end (V) of a state that moves on its own, others kept at the base."""
        S, Sinv = mode.S[0], mode.Sinv[0]
        A = -(S * mode.rate[0]) @ Sinv
        b = S @ mode.drive[0]
        others = np.delete(np.arange(len(b)), k)
        pull = b[k] + A[k, others] @ self.mem.base[others]
        rate = -A[k, k]
        return float(rate), float(pull / rate) if rate > 1e-12 else float("nan")

    def _round_move(
        self, q: int, held: int, at: int, rate: float, end: float, end_v: float, only: str
    ) -> Move:
        share = -np.expm1(-rate * self.tick_s)
        step = round(65536 * share)
        if step <= 0 or not np.isfinite(end):
            return Move("hold", 0)
        to = int(np.clip(round(end), 0, U16))
        key = f"move.q{q}.h{held}.{at}"
        self.constants.append(self.origin.end(f"{key}.end", to, q, held, at, end_v))
        if step > U16:
            return Move("jump", to)
        self.flows.append(Flow(q, held, at, 1.0 - float(share), end, end_v, rate, only))
        return Move("multiply", to, rate=step, only=only)  # type: ignore[arg-type]

    def eased(self, rows: list[tuple[ChargeMode, ...]]) -> tuple[list[tuple[ChargeMode, ...]], list[str]]:
        """Return the modes with the cheapest arithmetic, and sentences on it."""
        plain, turned = self._eased(mirrored=False), self._eased(mirrored=True)
        mirrored = len(self.mem.kept) == 1 and is_upside_down(rows) and distinct(turned) <= distinct(plain)
        chosen = turned if mirrored else plain
        moves = {(e.flow.q, e.flow.held, e.flow.at): e.move for e in chosen}
        self.constants += [c for each in chosen for c in self._numbers(each)]
        changed = [
            tuple(_with_moves(mode, q, h, moves) for h, mode in enumerate(row)) for q, row in enumerate(rows)
        ]
        return changed, said(chosen, mirrored, self.mem.scale_v)

    def _eased(self, *, mirrored: bool) -> list[Eased]:
        copies = range(len(self.mem.kept))
        return [e for at in copies for e in ease([flow for flow in self.flows if flow.at == at], mirrored)]

    def _numbers(self, eased: Eased) -> list[Constant]:
        flow, move = eased.flow, eased.move
        where = (flow.q, flow.held, flow.at)
        numbers = [
            self.origin.stays(
                f"{flow.key}.{'rate' if move.kind == 'scale' else 'shift'}",
                move,
                *where,
                flow.rate,
                self.tick_s,
            )
        ]
        if move.add:
            numbers.append(self.origin.add(f"{flow.key}.add", move, *where, flow.stays, flow.end))
        return numbers

    # --- more capacitors ---

    def _plane_moves(self, mode: Mode, q: int, held: int) -> tuple[Move, ...]:
        keep, ends_v = one_tick(self.mem, mode, self.tick_s)
        ends = (ends_v - self.mem.low_v) / self.mem.scale_v
        return tuple(self._plane_move(q, held, k, keep, ends, ends_v, mode) for k in range(len(ends)))

    def _plane_move(
        self, q: int, held: int, k: int, keep: Floats, ends: Floats, ends_v: Floats, mode: Mode
    ) -> Move:
        alone = np.abs(np.delete(keep[k], k)).max(initial=0.0) * 65536 < 0.5
        if alone:
            rate, end_v = self._own(mode, self.mem.kept[k])
            return self._round_move(q, held, k, rate, float(ends[k]), end_v, "both")
        row = tuple(int(v) if abs(v) <= U16 else 65536 for v in np.rint(keep[k] * 65536))
        whole = tuple(int(v) for v in np.clip(np.rint(ends), 0, U16))
        key = f"move.q{q}.h{held}.{k}"
        self.constants.append(self.origin.end(f"{key}.end", whole[k], q, held, k, float(ends_v[k])))
        for j, value in enumerate(row):
            self.constants.append(self.origin.keep(f"{key}.keep.{j}", value, q, held, k, j, self.tick_s))
        return Move("mix", whole[k], keep=row, ends=whole)


def is_upside_down(rows: Sequence[tuple[ChargeMode, ...]]) -> bool:
    """Whether the latch flips up where 65535 less the copy would make it flip down, to one copy."""
    pairs = [(low.flips, high.flips) for low, high in zip(*rows, strict=True) if low.flips and high.flips]
    return bool(pairs) and all(len(a) == len(b) == 1 and _mirrors(a[0], b[0]) for a, b in pairs)


def _mirrors(low: Test, high: Test) -> bool:
    return low.ge != high.ge and abs(low.limit - (U16 - high.limit)) <= 1


def _with_moves(mode: ChargeMode, q: int, held: int, moves: dict[tuple[int, int, int], Move]) -> ChargeMode:
    return replace(mode, moves=tuple(moves.get((q, held, at), move) for at, move in enumerate(mode.moves)))


def one_tick(mem: Memory, mode: Mode, tick_s: float) -> tuple[Floats, Floats]:
    """Return the kept states' exact one-tick matrix in copies, and where they settle in volt.

    Shapes (kept, kept) and (kept,).
    """
    S, Sinv, rate = mode.S[0], mode.Sinv[0], mode.rate[0]
    phi = (S * np.exp(-rate * tick_s)) @ Sinv
    pull = np.where(rate > 1e-12, mode.drive[0] / np.where(rate > 1e-12, rate, 1.0), Sinv @ mem.base)
    ends = S @ pull
    index = np.ix_(mem.kept, mem.kept)
    return phi[index] * mem.scale_v[None, :] / mem.scale_v[:, None], ends[list(mem.kept)]


def _pieces(mem: Memory, q: int, held: int, points: int = 513) -> list[tuple[int, float, float]]:
    """Which one-way branches conduct along the copy's range: (conducting set, from X, to X)."""
    X = np.linspace(0, U16, points)[:, None]
    lanes = mem.lanes(q, held, X)
    mem.engine.resolve(lanes, frozen=True)
    turns = np.flatnonzero(np.diff(lanes.conducts)) + 1
    cuts = [0, *turns.tolist(), points - 1]
    return [(int(lanes.conducts[a]), float(X[a, 0]), float(X[b, 0])) for a, b in pairwise(cuts)]


def _one_way(
    engine: Engine, pieces: list[tuple[int, float, float]], q: int, held: int, k: int, main: int
) -> str:
    """Whether the copy can move one way only: elsewhere nothing conducts to it."""
    still = {}
    for conducts, a, b in pieces:
        mode = engine.mode(q, held, conducts)
        A = -(mode.S[0] * mode.rate[0]) @ mode.Sinv[0]
        still[conducts] = (abs(A[k, k]) < 1e-9, a, b)
    at = next(i for i, piece in enumerate(pieces) if piece[0] == main)
    if at > 0 and all(still[c][0] for c, _, _ in pieces[:at]):
        return "down"
    if at + 1 < len(pieces) and all(still[c][0] for c, _, _ in pieces[at + 1 :]):
        return "up"
    return "both"


def _line_tests(
    mem: Memory, q: int, held: int
) -> tuple[tuple[Test, ...], tuple[Test, ...], tuple[Test, ...]]:
    """Find where along the copy's range the latch flips: force, flips, blocks."""
    spans = _flip_spans(mem, q, held)
    if not spans:
        return (), (), ()
    if spans[0] == (0, U16):
        return (ALWAYS,), (), ()
    flips = [Test((1,), False, b) if a == 0 else Test((1,), True, a) for a, b in spans if a == 0 or b == U16]
    inner = [(a, b) for a, b in spans if a > 0 and b < U16]
    if inner and not flips and len(inner) == 1:
        a, b = inner[0]
        return (), (Test((1,), True, a),), (Test((1,), True, b + 1),)
    return tuple(flips) if inner else (), () if inner else tuple(flips), ()


def _flip_spans(mem: Memory, q: int, held: int) -> list[tuple[int, int]]:
    """Return the stretches of copies, first to last, from which the circuit's latch leaves q."""
    on = np.concatenate([[False], decisions(mem, q, held) != q, [False]])
    turns = np.flatnonzero(on[1:] != on[:-1])
    return [(int(a), int(b) - 1) for a, b in turns.reshape(-1, 2)]


def _plane_tests(
    mem: Memory, mode: Mode, q: int
) -> tuple[tuple[Test, ...], tuple[Test, ...], tuple[Test, ...]]:
    """Turn the comparators of a mode into integer half-spaces: force, flips, blocks."""
    trigger, threshold, reset = (_half_space(mem, mode, j) for j in range(3))
    if q == 0:
        return (), _tests(trigger, below=True), _tests(reset, below=True)
    return _tests(reset, below=True), _tests(threshold, below=False), _tests(trigger, below=True)


def _half_space(mem: Memory, mode: Mode, guard: int) -> tuple[Floats, float]:
    """Return the guard as ``row . X + const`` volt over the copies."""
    row = mode.Gz[0, guard] @ mode.Sinv[0]
    others = [k for k in range(len(row)) if k not in mem.kept]
    const = mode.g0[0, guard] + row[others] @ mem.base[others] + row[list(mem.kept)] @ mem.low_v
    return row[list(mem.kept)] * mem.scale_v, float(const)


def _tests(half: tuple[Floats, float], below: bool) -> tuple[Test, ...]:
    """Return no test where the guard never asserts, ALWAYS where it does throughout, else one test."""
    row, const = half
    sign = -1.0 if below else 1.0
    row, const = sign * row, sign * const  # asserted where row . X + const > 0
    least = const + np.minimum(row, 0).sum() * U16
    most = const + np.maximum(row, 0).sum() * U16
    zero = (0,) * len(row)
    if not most > 0:
        return ()
    if least > 0 or len(row) == 0:
        return (Test(zero, True, 0),)
    largest = np.abs(row).max()
    single = np.count_nonzero(np.abs(row) > largest * 1e-9) == 1
    factor = (1.0 if single else 32767.0 / 4) / largest
    coeff = np.rint(row * factor).astype(np.int64)
    limit = int(np.floor(-const * factor)) + 1
    return (Test(tuple(int(c) for c in coeff), True, limit),)
