"""What holds in the typical unit and not in every allowed one; what holds, but not long enough."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from porter.behaviour.corner import Population
from porter.behaviour.measure import MarginKey, WindowKey, margin_of
from porter.behaviour.rules.case import Case
from porter.behaviour.rules.memory import oscillating_masks
from porter.behaviour.rules.reset import troubled
from porter.behaviour.rules.words import figure, held_words, level, plain, three, two_digits, volts
from porter.circuit.family import KEYS
from porter.circuit.values import Floats
from porter.findings import Finding, Position
from porter.spec.model import Button

_NEAR = 1e-9  # V; a margin of this much below zero is rounding


# --- hold-not-guaranteed ---


@dataclass(frozen=True, slots=True)
class _Lost:
    """A margin that some unit lacks: the worst unit, and the value that takes most of it away."""

    key: MarginKey
    nominal: float
    worst: float
    row: Floats
    column: int
    at_most: bool
    by_parts: bool
    parts_worst: float

    @property
    def cause(self) -> tuple[int, bool, bool]:
        """What losses are merged by."""
        return self.column, self.at_most, self.by_parts


def hold_not_guaranteed(case: Case) -> Iterator[Finding]:
    """A margin that the nominal unit has and some allowed unit has not; one finding a cause."""
    busy, resets = oscillating_masks(case), troubled(case)
    margins = case.evidence.nominal.margins
    lost = [
        found
        for key, nominal in margins.items()
        if nominal[0] >= 0 and key[0] not in busy and not _told_of(resets, key)
        if (found := _lost(case, key)) is not None
    ]
    causes: dict[tuple[int, bool, bool], list[_Lost]] = {}
    for one in lost:
        if not _follows(case, one.key):
            causes.setdefault(one.cause, []).append(one)
    for one in lost:
        if causes and _follows(case, one.key):
            causes.get(one.cause, next(iter(causes.values()))).append(one)
    for losses in causes.values():
        yield _unsure(case, sorted(losses, key=_rank))


def _told_of(resets: set[int], key: MarginKey) -> bool:
    """True where reset-not-low-enough says it already."""
    return any(key[0] & held == held for held in resets) and (key[2] == "press" or key[2].startswith("reset"))


def _follows(case: Case, key: MarginKey) -> bool:
    """True where every unit that loses this margin while held has lost one at rest or at the press before."""
    if key[0] == 0 or key[2] == "press":
        return False
    margins = case.evidence.published.measures.margins
    before = [v < -_NEAR for k, v in margins.items() if k[0] == 0 or k[2] == "press"]
    return bool(before) and not ((margins[key] < -_NEAR) & ~np.logical_or.reduce(before)).any()


def _lost(case: Case, key: MarginKey) -> _Lost | None:
    drawn = case.evidence.drawn.measures.margins[key]
    for group, by_parts in ((case.evidence.drawn, True), (case.evidence.published, False)):
        values = group.measures.margins[key]
        if not np.isfinite(values).all():
            return None  # a pin that is not connected never decides
        worst = int(values.argmin())
        if values[worst] < -_NEAR:
            column, at_most = _cause(group, values)
            nominal = float(case.evidence.nominal.margins[key][0])
            row = group.rows[worst : worst + 1]
            return _Lost(
                key, nominal, float(values[worst]), row, column, at_most, by_parts, float(drawn.min())
            )
    return None


def _cause(group: Population, values: Floats) -> tuple[int, bool]:
    """Return the value whose two ends differ most in the mean margin, and which end is the bad one."""
    best = (0.0, group.moving[0], False)
    for column in group.moving:
        high = group.rows[:, column] > group.rows[0, column]
        low = group.rows[:, column] < group.rows[0, column]
        if high.any() and low.any():
            swing = float(values[high].mean() - values[low].mean())
            best = max(best, (abs(swing), column, swing < 0))
    return best[1], best[2]


def _rank(lost: _Lost) -> tuple[int, float]:
    """Say a loss at rest before one at a press before one while held, which often follows from them."""
    mask, _, what = lost.key
    return (0 if mask == 0 else 1 if what == "press" else 2), lost.worst


def _unsure(case: Case, losses: list[_Lost]) -> Finding:
    first = losses[0]
    end = "most" if first.at_most else "least"
    name = case.cols.names[first.column]
    value = float((case.cols.most if first.at_most else case.cols.least)[first.column])
    if first.by_parts:
        whose = "part tolerances alone do it"
    else:
        whose = (
            f"part tolerances alone leave {volts(first.parts_worst)}; the timer's published spread does it"
        )
    message = (
        f"{_where(case, first.key)}: {volts(first.nominal)} to spare in the typical unit, "
        f"{volts(first.worst)} < 0 V in the worst allowed one; {whose}, above all {_said(name)} "
        f"at its {end}, {figure(value, _unit(case, name))}"
    )
    if len(losses) > 1:
        message += f" (and {len(losses) - 1} more margin{'s' if len(losses) > 2 else ''} by the same cause)"
    return Finding("hold-not-guaranteed", "warning", _place(case, name), message, _narrow(case, losses))


def _where(case: Case, key: MarginKey) -> str:
    mask, q, what = key
    if what == "press":
        names = held_words(case.circuit, mask).removesuffix(" held")
        return f"pressing {names} with the output {level(q)} must turn it {level(1 - q)}"
    pin, side = what.split()
    when = f"{held_words(case.circuit, mask)}, output {level(q)}"
    return f"{when}: the {pin} input must stay {side[:-1]} its level"


def _said(name: str) -> str:
    kind, _, rest = name.partition(".")
    if kind == "timer":
        return f"the {KEYS[rest][1].partition(',')[0]}"
    return "the supply" if kind == "supply" else f"`{rest}`"


def _unit(case: Case, name: str) -> str:
    kind, _, rest = name.partition(".")
    if kind == "timer":
        return KEYS[rest][0]
    if kind == "supply":
        return "V"
    part = case.part(rest)
    if part is None:
        return "ohm"
    return {"capacitor": "F", "led": "V", "diode": "V"}.get(part.kind, "A" if part.current else "ohm")


def _place(case: Case, name: str) -> Position:
    kind, _, rest = name.partition(".")
    timer = case.circuit.timer
    if kind == "timer":
        return timer.value_positions.get(rest, timer.position)
    part = case.part(rest.split(".")[0])
    button = next((b for b in case.circuit.buttons if b.name == rest.split(".")[0]), None)
    return part.position if part else button.position if button else case.circuit.supply_position


def _narrow(case: Case, losses: list[_Lost]) -> str:
    """Say how much narrower the guilty values must be for the worst units to keep their margins."""
    group = case.evidence.drawn if losses[0].by_parts else case.evidence.published
    order = _by_effect(group, losses)
    for count in range(1, len(order) + 1):
        shares = [_share(case, lost, order[:count]) for lost in losses]
        if min(shares) > 0:
            share = min(shares)
            return " and ".join(_bound(case, losses[0], column, share) for column in order[:count])
    return "choose parts and a timer with narrower spreads"


def _by_effect(group: Population, losses: list[_Lost]) -> list[int]:
    values = np.minimum.reduce([group.measures.margins[lost.key] for lost in losses])
    swings = []
    for column in group.moving:
        high, low = (
            group.rows[:, column] > group.rows[0, column],
            group.rows[:, column] < group.rows[0, column],
        )
        swing = abs(float(values[high].mean() - values[low].mean())) if high.any() and low.any() else 0.0
        swings.append((-swing, column))
    first = losses[0].column
    return [first, *(c for _, c in sorted(swings) if c != first)]


def _share(case: Case, lost: _Lost, columns: list[int]) -> float:
    """Return the part of the columns' own deviation with which the worst unit keeps its margin, 0 = none."""
    shares = np.linspace(0.0, 1.0, 101)[:-1]
    rows = np.repeat(lost.row, len(shares), axis=0)
    nominal = case.cols.nominal[columns]
    rows[:, columns] = nominal + shares[:, None] * (lost.row[:, columns] - nominal)
    good = margin_of(case.with_rows(rows), lost.key) >= 0
    return float(shares[int(np.argmin(good)) - 1] if not good.all() else shares[-1]) if good[0] else 0.0


def _bound(case: Case, lost: _Lost, column: int, share: float) -> str:
    name = case.cols.names[column]
    nominal, least, most = (float(a[column]) for a in (case.cols.nominal, case.cols.least, case.cols.most))
    share *= 0.98  # what other corners may want beside the worst one's
    if lost.row[0, column] > nominal:
        most = nominal + share * (most - nominal)
    else:
        least = nominal + share * (least - nominal)
    kind, _, rest = name.partition(".")
    unit = _unit(case, name)
    value = three(nominal, least, most, {"": "1", "ohm": ""}.get(unit, unit))
    if kind == "timer":
        return f"fit a timer that is sure of `{rest}: {value}` and write that among its values"
    if kind == "supply":
        return f"write `supply: {value}`"
    return f"change `{rest}` to `{value}`"


# --- bounce-outlasts-window ---


def bounce_outlasts_window(case: Case) -> Iterator[Finding]:
    """A contact that bounces for longer than the shortest opening that counts as a second press."""
    for index, button in enumerate(case.circuit.buttons):
        if button.bounce_s is not None:
            yield from _bounce(case, index, button, button.bounce_s)


def _bounce(case: Case, index: int, button: Button, bounce: float) -> Iterator[Finding]:
    keys: list[WindowKey] = [(index, q, "stray-gap") for q in (0, 1)]
    nominal, key = min((float(case.evidence.nominal.windows[k][0]), k) for k in keys)
    groups = (case.evidence.drawn, case.evidence.published)
    least = min(float(g.measures.windows[k].min()) for k in keys for g in groups)
    if bounce <= least:
        return
    error = bounce > nominal
    window = nominal if error else least
    unit = "" if error else " in some allowed unit"
    message = (
        f"{button.name} may bounce for {figure(bounce, 's')}, longer than the {figure(window, 's')} "
        f"(stray gap before the output turns {level(1 - key[1])}) "
        f"after which an opening{unit} counts as a second press"
    )
    safe = least if least > 0 else nominal
    if 0 < safe < np.inf:
        fit = (
            f"fit a `{button.name}` with `bounce: {plain(two_digits(safe * (1 - 1e-9), up=False))}s` at most"
        )
        mend = f"{fit}, or enlarge the memory capacitor"
    else:
        mend = f"filter {button.name}: any opening counts as a second press"
    yield Finding("bounce-outlasts-window", "error" if error else "warning", button.position, message, mend)
