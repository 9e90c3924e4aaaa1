"""The network between each contact and its pin."""

import math
from itertools import product
from typing import Literal

from porter.findings import Finding
from porter.sheet import figures as fig
from porter.sheet.model import Input, Row
from porter.sheet.resistors import E24, e24_at_most, least, most
from porter.spec.model import RAILS, Button, Circuit, Spread


def contact(circuit: Circuit, button: Button) -> tuple[Input, list[Row], list[Finding]]:
    """Return a button's network, its lines of the sheet, and what is wrong with it."""
    rail = _rail(button)
    supply, own = circuit.port.supply, circuit.supply
    if rail == "vcc" and own.most > supply.most:
        divided = _divider(own, supply)
        if divided is None:
            return _refused(circuit, button)
        network = _input(button, "vcc", False, *divided, own.least / most(sum(divided)))
        return network, _divider_rows(button, network, own, supply), []
    to: Literal["gnd", "vcc"] = rail or "gnd"
    ohm = pull_resistor(supply)
    amperes = supply.least / (most(ohm) + button.resistance.most)
    network = _input(button, to, rail is None, ohm, 0.0, amperes)
    return network, _pull_rows(button, network, supply), _levels(button, network)


def _input(
    button: Button, to: Literal["gnd", "vcc"], moved: bool, pull: float, top: float, amperes: float
) -> Input:
    closed = int(to == "vcc")
    level = closed if button.normally == "open" else 1 - closed
    return Input(button.name, to, moved, pull, top, amperes, level)


def pull_resistor(supply: Spread) -> float:
    """Return the largest E24 resistor through which a closed contact still gets its wetting current.

    >>> pull_resistor(Spread.exact(5.0))  # 5 V / 1 mA / 1.05 = 4762 ohm
    4700.0
    """
    return e24_at_most(supply.least / fig.WETTING.value / most(1.0))


def _rail(button: Button) -> Literal["gnd", "vcc"] | None:
    """Return the rail that the contact closes to, None where it joins two nodes of the circuit."""
    for node in button.nodes:
        if node in RAILS:
            return "gnd" if node == "gnd" else "vcc"
    return None


def _divider(own: Spread, supply: Spread) -> tuple[float, float] | None:
    """Return (lower, upper) ohm that bring the circuit's supply down to a high level that the pin can bear.

    High even at the least supply and with both resistors off the wrong way; never above the pin's own
    supply; of all pairs the one that comes nearest to the wetting current from above.
    """
    total = own.least / fig.WETTING.value
    decades = range(math.floor(math.log10(total)) - 2, math.floor(math.log10(total)) + 1)
    values = [float(f"{e}e{d - 1}") for d in decades for e in E24]
    fitting = [
        (low, top)
        for low, top in product(values, values)
        if most(low + top) <= total and divides(low, top, own, supply)
    ]
    return max(fitting, key=sum) if fitting else None


def divides(low: float, top: float, own: Spread, supply: Spread) -> bool:
    """Whether a divider gives a sure high and never more than the pin's supply."""
    high = own.most * most(low) / (most(low) + least(top))
    sure = own.least * least(low) / (least(low) + most(top))
    return high <= supply.least and sure >= fig.HIGH_LEAST.value * supply.most


def _pull_rows(button: Button, network: Input, supply: Spread) -> list[Row]:
    up = network.to == "gnd"
    way = f"pull-{'up' if up else 'down'} {_ohm(network.pull_ohm)} to {'the port supply' if up else 'ground'}"
    wired = ""
    if network.moved:
        wired = f"; the contact goes from the pin to ground, no longer between {' and '.join(button.nodes)}"
    elif not up:
        wired = "; the contact goes to the port's supply"
    why = (
        f"{supply.least:g} V / (1.05 * {network.pull_ohm:g} ohm + {button.resistance.most:g} ohm) = "
        f"{network.contact_a * 1e3:.2f} mA through the closed contact; the controller's own pull-up of "
        f"{fig.PULL_UP[0] / 1e3:g} to {fig.PULL_UP[1] / 1e3:g} kohm gives {supply.nominal / fig.PULL_UP[0] * 1e3:.2f} mA "
        "at most, which gold contacts bear"
    )
    return [
        Row("Inputs", button.name, f"{way}{wired}; 1 kohm in series to the pin", why, fig.WETTING.source),
        _level_row(button, network),
    ]


def _divider_rows(button: Button, network: Input, own: Spread, supply: Spread) -> list[Row]:
    low, top = network.pull_ohm, network.top_ohm
    high = own.most * most(low) / (most(low) + least(top))
    sure = own.least * least(low) / (least(low) + most(top))
    what = f"divider: {_ohm(top)} from the contact to the pin, {_ohm(low)} from the pin to ground"
    why = (
        f"{sure:.2f} V to {high:.2f} V at the pin, between 0.7 * {supply.most:g} V and {supply.least:g} V; "
        f"{network.contact_a * 1e3:.2f} mA at least through the contact. Should the port be without supply, "
        f"{own.most / least(top) * 1e3:.2f} mA flow into its clamp: keep the wire off then, or clamp to ground"
    )
    return [Row("Inputs", button.name, what, why, fig.HIGH_LEAST.source), _level_row(button, network)]


def _level_row(button: Button, network: Input) -> Row:
    word = "high" if network.level else "low"
    kind = "opens" if button.normally == "closed" else "closes"
    why = f"the contact {kind} when pressed, to {'the supply' if network.to == 'vcc' else 'ground'}"
    return Row("Inputs", button.name, f"pressed reads {word}: BOARD_PRESSED {network.level}", why)


def _levels(button: Button, network: Input) -> list[Finding]:
    """Find a closed contact that doesn't pull its pin far enough, or an open one that leaks too much."""
    share = button.resistance.most / (button.resistance.most + least(network.pull_ohm))
    found = []
    if share > fig.LOW_MOST.value:
        found.append(
            _finding(
                button,
                f"{button.name} closed through {button.resistance.most:g} ohm leaves {share:.2f} of the supply "
                f"at its pin, {fig.LOW_MOST.value:g} at most counts: {button.resistance.most:g} / "
                f"({button.resistance.most:g} + {least(network.pull_ohm):g})",
                "fit a contact of less resistance, or a gold one with a larger pull-up",
            )
        )
    if button.leak is not None:
        pull = most(network.pull_ohm) + fig.SERIES_OHM
        share = button.leak.least / (button.leak.least + pull)
        if share < fig.HIGH_LEAST.value:
            found.append(
                _finding(
                    button,
                    f"{button.name} open leaks through {button.leak.least:g} ohm: {share:.2f} of the supply is left, "
                    f"{fig.HIGH_LEAST.value:g} is needed",
                    "fit a contact that leaks less, or a smaller pull-up",
                )
            )
    return found


def _refused(circuit: Circuit, button: Button) -> tuple[Input, list[Row], list[Finding]]:
    own, supply = circuit.supply, circuit.port.supply
    ohm = pull_resistor(supply)
    network = _input(button, "vcc", True, ohm, 0.0, supply.least / most(ohm))
    message = (
        f"no divider makes {own.least:g} V to {own.most:g} V from {button.name} a sure high of at least "
        f"{fig.HIGH_LEAST.value * supply.most:.2f} V and at most {supply.least:g} V at its pin"
    )
    found = _finding(button, message, "take the contact to the port's supply in place of the circuit's")
    return network, _pull_rows(button, network, supply), [found]


def _finding(button: Button, message: str, mend: str) -> Finding:
    return Finding("level-not-met", "error", button.position, message, mend)


def _ohm(value: float) -> str:
    return (
        f"{value / 1e6:g} Mohm"
        if value >= 1e6
        else f"{value / 1e3:g} kohm"
        if value >= 1e3
        else f"{value:g} ohm"
    )


ohm_text = _ohm
