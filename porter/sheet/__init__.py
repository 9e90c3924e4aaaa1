"""The interface sheet: everything outside the firmware that the port needs.

The room and the function share a name, so the room can be called: ``porter.sheet(circuit, behaviour, port)``.
"""

import sys
from types import ModuleType

from porter.behaviour.model import Behaviour
from porter.port.model import Port
from porter.sheet.model import Driver, Input, Row, Sheet
from porter.sheet.text import render_text
from porter.sheet.whole import sheet
from porter.spec.model import Circuit


class _Room(ModuleType):
    def __call__(self, circuit: Circuit, behaviour: Behaviour, port: Port) -> Sheet:
        return sheet(circuit, behaviour, port)


sys.modules[__name__].__class__ = _Room

__all__ = ["Driver", "Input", "Row", "Sheet", "render_text", "sheet"]
