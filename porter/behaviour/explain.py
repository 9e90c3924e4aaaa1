"""Where a number came from: the parts that move it, and how it is formed."""

import numpy as np

from porter.behaviour.corner import Population
from porter.behaviour.measure import MarginKey, Measures, WindowKey
from porter.circuit.engine import Engine


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
    """Say how a window is formed and which values move it (share and direction of its spread)."""
    button, _, kind = key
    seconds = float(nominal.windows[key][0])
    name = engine.circuit.buttons[button].name
    if np.isinf(seconds):
        return f"{name} never changes that output this way"
    again = f"until pressing {name} again crosses a level"
    said = {
        "shortest-press": f"from rest, from the closing of {name} until a deciding voltage crosses its level",
        "re-arm-after-tap": f"from the release of a shortest press, {again}",
        "re-arm-after-hold": f"from the release of a settled hold, {again}",
        "stray-gap": "the shorter of the two re-arm times",
    }[kind]
    return "; ".join(filter(None, (said, _moved_by(drawn, drawn.measures.windows[key], engine))))


def margin_why(engine: Engine, key: MarginKey, drawn: Population) -> str:
    """Say which values move a margin."""
    return _moved_by(drawn, drawn.measures.margins[key], engine)
