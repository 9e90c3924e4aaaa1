"""The named numbers of a port: each with its meaning, working and source, once for each value and role."""

import re
import textwrap
from dataclasses import dataclass, field, replace

from porter.emit.names import comment, unique
from porter.port.model import U16, Constant, Port


@dataclass(frozen=True, slots=True)
class Number:
    """A named constant of the firmware; `name` comes without the language's prefix."""

    name: str
    value: int
    about: tuple[str, ...]  # comment lines, filtered


@dataclass(slots=True)
class Numbers:
    """Hands out named numbers; equal values in the same role become one number."""

    port: Port
    rows: dict[tuple[str, int], Number] = field(default_factory=dict)
    keys: dict[tuple[str, int], list[str]] = field(default_factory=dict)

    def get(self, role: str, where: str, value: int, key: str, fallback: str) -> Number:
        """Return the number for *value* in *role*, named after the place where it is first used.

        Args:
            role: such as ``END``; `where`: such as ``LOW_SET``, may be empty.
            key: of the port's constant; `fallback`: the description where the port has none.
        """
        known = self.rows.get((role, value))
        keys = self.keys.setdefault((role, value), [])
        keys += [key] if key not in keys else []
        if known is None:
            name = self._free(f"{role}_{where}" if where else role)
            known = Number(name, value, self._about(key, fallback, value))
            self.rows[role, value] = known
        return known

    def all(self) -> tuple[Number, ...]:
        """Return every number asked for, in the order of first use."""
        return tuple(replace(row, about=(*row.about, *self._shared(at))) for at, row in self.rows.items())

    def held(self, held: int) -> str:
        """Return a word for a held mask: ``OPEN``, ``SET`` or ``SET_CLEAR``."""
        words = unique(self.port.buttons)
        return "_".join(word for i, word in enumerate(words) if held >> i & 1) or "OPEN"

    def place(self, q: int, held: int) -> str:
        """Return a word for a mode, such as ``LOW_SET``."""
        return f"{('LOW', 'HIGH')[q]}_{self.held(held)}"

    def _free(self, name: str) -> str:
        taken = {number.name for number in self.rows.values()}
        choices = [name, *(f"{name}_{n}" for n in range(2, len(taken) + 3))]
        return next(choice for choice in choices if choice not in taken)

    def _shared(self, at: tuple[str, int]) -> list[str]:
        """Return a line on the other modes that use a number."""
        modes = [re.search(r"\.q(\d)\.h(\d+)\.", key) for key in self.keys[at]]
        places = dict.fromkeys((int(m[1]), int(m[2])) for m in modes if m)
        words = [f"{('low', 'high')[q]} with {self._names(h)}" for q, h in list(places)[1:]]
        return wrap(f"also for: {', '.join(words)}") if words else []

    def _names(self, held: int) -> str:
        return " and ".join(b for i, b in enumerate(self.port.buttons) if held >> i & 1) or "none held"

    def _about(self, key: str, fallback: str, value: int) -> tuple[str, ...]:
        # The first test of a mode may go without its number.
        keys = (key, key.replace(".0.limit", ".limit"))
        row = next((c for c in self.port.constants if c.key in keys), None)
        if row is None:
            return tuple(wrap(fallback))
        turned = wrap(f"as it is kept: 65535 - {row.value} = {value}") if value == U16 - row.value else []
        return (*describe(row), *turned)


def describe(row: Constant) -> tuple[str, ...]:
    """Return a constant's meaning, working and source as comment lines."""
    lines = wrap(row.meaning)
    if row.working:
        lines += wrap(f"= {row.working}")
    if row.source:
        lines += wrap(f"from {row.source}")
    return tuple(lines)


def wrap(text: str, width: int = 96) -> list[str]:
    """Return filtered *text* as comment lines."""
    return textwrap.wrap(comment(text), width, break_on_hyphens=False)
