"""Writes a port as source files: a core, a self-test and an example pin layer in each language.

The room and the function it is for share a name, so the room can be called: ``porter.emit(port,
suite)`` works whether or not a module in here was imported before.
"""

import sys
from types import ModuleType

from porter.emit.c99 import C99
from porter.emit.language import Job, Language, Levels
from porter.emit.lower import lower
from porter.emit.micropython import MicroPython
from porter.port.model import Port
from porter.resources import environment
from porter.vectors.model import Suite

#: To add a language: a folder of templates, a class like these two, and a line here.
LANGUAGES: tuple[Language, ...] = (C99(), MicroPython())


def emit(port: Port, suite: Suite, *, statement: str = "", levels: Levels | None = None) -> dict[str, str]:
    """Write a port in every language.

    Args:
        suite: the vectors that the self-tests carry.
        statement: what parity proved, for the headers.
        levels: what the pins read and give; None = contacts to ground, outputs active high.

    Returns:
        Text by relative path, such as ``firmware/c/lamp_latch.c``; the same input gives the same text.

    Raises:
        ValueError: the port has a number that the step functions can't carry (see `lower`).
    """
    job = Job(lower(port), suite, statement, levels)
    return {path: text for language in LANGUAGES for path, text in _write(language, job).items()}


def _write(language: Language, job: Job) -> dict[str, str]:
    templates, context = environment(), language.context(job)
    return {
        f"{language.folder}/{path.format(name=job.name)}": templates.get_template(template).render(context)
        for template, path in language.files.items()
    }


class _Room(ModuleType):
    def __call__(
        self, port: Port, suite: Suite, *, statement: str = "", levels: Levels | None = None
    ) -> dict[str, str]:
        return emit(port, suite, statement=statement, levels=levels)


sys.modules[__name__].__class__ = _Room

__all__ = ["LANGUAGES", "Job", "Language", "Levels", "emit"]
