"""The findings: what is wrong with a drawing, with the failing inequality and a way to mend it.

A rule is a function from a `Case` to findings; none knows a circuit by name, all look at the
solved network.  Each mend is worded so that it can be carried out on the spec as it stands.
"""

from collections.abc import Callable, Iterator

from porter.behaviour.rules import currents, holding, meaning, memory, reset, wiring
from porter.behaviour.rules.case import Case, look
from porter.behaviour.rules.evidence import Evidence
from porter.findings import Finding

__all__ = ["RULES", "Evidence", "find"]

#: Every rule by its slug, in the order in which they are asked.
RULES: dict[str, Callable[[Case], Iterator[Finding]]] = {
    "floating-input": wiring.floating_input,
    "led-without-resistor": wiring.led_without_resistor,
    "relay-without-diode": wiring.relay_without_diode,
    "no-decoupling": wiring.no_decoupling,
    "supply-short": currents.supply_short,
    "output-overloaded": currents.output_overloaded,
    "timer-out-of-range": currents.timer_out_of_range,
    "leak-too-high": memory.leak_too_high,
    "capacitor-on-inputs": memory.capacitor_on_inputs,
    "divider-uneven": memory.divider_uneven,
    "high-level-too-low": memory.high_level_too_low,
    "feedback-too-strong": memory.feedback_too_strong,
    "hold-not-guaranteed": holding.hold_not_guaranteed,
    "bounce-outlasts-window": holding.bounce_outlasts_window,
    "reset-not-low-enough": reset.not_low_enough,
    "reset-pull-up-too-weak": reset.pull_up_too_weak,
    "power-on-undetermined": meaning.power_on_undetermined,
    "intent-not-met": meaning.intent_not_met,
}


def find(evidence: Evidence) -> Iterator[Finding]:
    """Yield the findings of every rule."""
    case = look(evidence)
    for rule in RULES.values():
        yield from rule(case)
