"""Where a number came from: the formula with its numbers, and the parts that move it.

For a circuit with one capacitor every time is a sum of stretches, each of them
``tau * ln((start - end) / (until - end))`` of the capacitor's voltage; that is what is written.
With more capacitors the time constants are named, with the parts that make them.
"""

import math
from dataclasses import dataclass

import numpy as np

from porter.behaviour.corner import Population
from porter.behaviour.measure import MarginKey, Measures, WindowKey, after_press
from porter.behaviour.rules.words import figure, volts
from porter.circuit.engine import Engine, Ints
from porter.circuit.flow import reach
from porter.circuit.network import Mode, solve_mode
from porter.circuit.values import Floats
from porter.spec.model import RAILS


def _moved_by(population: Population, values: np.ndarray, engine: Engine) -> str:
    """Name the values that move a quantity, the strongest first, with the share of its spread."""
    if not population.exhaustive or not population.moving or not np.isfinite(values).all():
        return ""
    corners = values[1:]
    bits = np.arange(len(corners))
    swings = []
    for k, column in enumerate(population.moving):
        up = corners[(bits >> k & 1) == 1].mean() - corners[(bits >> k & 1) == 0].mean()
        swings.append((abs(up), engine.columns.names[column], up))
    total = sum(s for s, _, _ in swings)
    if total <= 0:
        return ""
    named = [
        f"{name.removeprefix('parts.').removeprefix('buttons.')} ({'+' if up > 0 else '-'}{size / total:.0%})"
        for size, name, up in sorted(swings, key=lambda s: (-s[0], s[1]))
        if size / total >= 0.005
    ]
    return "moved by " + ", ".join(named)


def window_why(engine: Engine, nominal: Measures, key: WindowKey, drawn: Population) -> str:
    """Say how a window is formed: what is timed, its formula in numbers, and which values move it."""
    button, _, kind = key
    seconds = float(nominal.windows[key][0])
    name = engine.circuit.buttons[button].name
    if np.isinf(seconds):
        return f"{name} never changes that output this way"
    again = f"until pressing {name} again crosses a level"
    said = {
        "shortest-press": f"from rest, time from the closing of {name} until a deciding voltage crosses its level",
        "re-arm-after-tap": f"from the release of a shortest press, {again}",
        "re-arm-after-hold": f"from the release of a settled hold, {again}",
        "stray-gap": "the shorter of the two re-arm times",
    }[kind]
    formula = "" if kind == "stray-gap" or seconds == 0 else _formula(engine, key, seconds)
    return "; ".join(filter(None, (said, formula, _moved_by(drawn, drawn.measures.windows[key], engine))))


# --- the formula ---


@dataclass(frozen=True, slots=True)
class _Stretch:
    mode: Mode
    z0: Floats
    seconds: float


def _formula(engine: Engine, key: WindowKey, seconds: float) -> str:
    """Write the time as what the capacitors do until then, empty where nothing moves."""
    walked = [s for s in _joined(_walk(engine, key, seconds)) if s.seconds > 1e-6 * seconds]
    said = _one if engine.topo.states == 1 else _several
    return " and then ".join(filter(None, (said(engine, s) for s in walked)))


def _walk(engine: Engine, key: WindowKey, seconds: float) -> list[_Stretch]:
    """Run the nominal unit through the time in question."""
    button, q, kind = key
    mask = 1 << button
    if kind == "shortest-press":
        lanes, _ = engine.rest(q)
        engine.press(lanes, mask)
    else:
        lanes = after_press(engine, engine.rest(1 - q)[0], mask, kind == "re-arm-after-hold")
    walked: list[_Stretch] = []

    def watch(_: Ints, mode: Mode, z0: Floats, __: Floats, length: Floats) -> None:
        walked.append(_Stretch(mode, z0[0], float(length[0])))

    engine.run(lanes, seconds, one_flip=True, watcher=watch)
    return walked


def _joined(walked: list[_Stretch]) -> list[_Stretch]:
    """Put stretches of one mode that follow each other into one: a comparator looked up, and nothing came of it."""
    out: list[_Stretch] = []
    for stretch in walked:
        if out and out[-1].mode is stretch.mode:
            out[-1] = _Stretch(stretch.mode, out[-1].z0, out[-1].seconds + stretch.seconds)
        else:
            out.append(stretch)
    return out


def _one(engine: Engine, stretch: _Stretch) -> str:
    """One capacitor: its voltage from where, toward where, how fast, until where."""
    mode = stretch.mode
    return _exponential(engine, stretch, 0, engine.topo.state_names[0], mode.S[0, 0], 0.0)


def _several(engine: Engine, stretch: _Stretch) -> str:
    """More capacitors: the time constants that move a deciding voltage meanwhile, the strongest first."""
    mode = stretch.mode
    pull = mode.drive[0] - mode.rate[0] * stretch.z0
    moved = np.abs(mode.Gz[0, :3] * pull * reach(mode.rate[0], np.array(stretch.seconds)))
    best = moved.max(axis=0, initial=0.0)
    if best.max(initial=0.0) < 1e-9:
        return ""
    strong = [int(k) for k in np.argsort(-best) if best[k] > 0.01 * best.max() and mode.rate[0, k] > 0]
    if len(strong) == 1:
        pin = ("trigger", "threshold", "reset")[int(moved[:, strong[0]].argmax())]
        node = engine.circuit.timer.pins[pin]
        if node not in RAILS:
            at = engine.topo.node(node)
            return _exponential(engine, stretch, strong[0], node, mode.Vz[0, at], float(mode.v0[0, at]))
    named = [f"{figure(1 / float(mode.rate[0, k]), 's')} ({_made_of(engine, mode, k)})" for k in strong]
    return f"exponentials with tau {' and '.join(named)} for {figure(stretch.seconds, 's')}"


def _exponential(
    engine: Engine, stretch: _Stretch, which: int, name: str, per_z: Floats, const: float
) -> str:
    """Write out a voltage ``const + per_z z`` that a single exponential moves."""
    mode, z0 = stretch.mode, stretch.z0
    rate = mode.rate[0]
    if not rate[which]:
        return ""
    z1 = z0 + (mode.drive[0] - rate * z0) * reach(rate, np.array(stretch.seconds))
    start, until = (float(const + per_z @ z) for z in (z0, z1))
    left = math.exp(-float(rate[which]) * stretch.seconds)
    end = (until - start * left) / (1 - left)
    if abs(start - end) < 1e-9:
        return ""
    tau, parts = figure(1 / float(rate[which]), "s"), _made_of(engine, mode, which)
    return (
        f"{name} from {volts(start)} toward {volts(end)} with tau {tau} ({parts}) until {volts(until)}: "
        f"{tau} * ln({_distance(start, end)} / {_distance(until, end)}) = {figure(stretch.seconds, 's')}"
    )


def _distance(a: float, b: float) -> str:
    """Write how far two voltages are apart, as the difference that it is."""
    high, low = max(a, b), min(a, b)
    return volts(high) if abs(low) < 1e-9 else f"({volts(high)} - {volts(low)})".replace("- -", "+ ")


def _made_of(engine: Engine, mode: Mode, which: int) -> str:
    """Name the parts that make a time constant, by how it follows each: a product where each counts once."""
    cols, step = engine.columns, 1e-4
    rows = np.tile(cols.nominal, (len(cols.names) + 1, 1))
    rows[np.arange(len(cols.names)) + 1, np.arange(len(cols.names))] *= 1 + step
    rate = solve_mode(engine.topo, rows, mode.q, mode.held, mode.conducts).rate[:, which]
    follows = -np.log(rate[1:] / rate[0]) / math.log1p(step)
    found = [
        (float(f), n.split(".", 1)[-1]) for f, n in zip(follows, cols.names, strict=True) if abs(f) > 0.01
    ]
    found.sort(key=lambda pair: (-abs(pair[0]), pair[1]))
    if all(abs(share - 1) < 0.02 for share, _ in found):
        return " * ".join(sorted((n for _, n in found), reverse=True))
    return ", ".join(f"{name} {share:.0%}" for share, name in found)


def margin_why(engine: Engine, key: MarginKey, drawn: Population) -> str:
    """Say where the deciding voltage and its level stand, and which values move the margin."""
    moved = _moved_by(drawn, drawn.measures.margins[key], engine)
    return "; ".join(filter(None, (_standing(engine, key), moved)))


def _standing(engine: Engine, key: MarginKey) -> str:
    """Write a settled margin as the difference that it is, empty for a press (its farthest point)."""
    mask, _, what = key
    if what == "press":
        return "the farthest that the press takes the deciding voltage past its level"
    pin = what.split()[0]
    lanes, _ = engine.rest(int(what[-1]))
    engine.press(lanes, mask)
    engine.run(lanes, np.inf)
    node = engine.circuit.timer.pins[pin]
    at = float(engine.volts(lanes)[0, engine.topo.node(node)])
    over = float(engine.guards(lanes)[0, ("trigger", "threshold", "reset").index(pin)])
    return f"{pin} ({node}) at {volts(at)}, its level at {volts(at - over)}"
