"""What every language's writer shares: the header's sentences and the shape of a writer."""

from dataclasses import dataclass
from typing import ClassVar, Protocol

from porter.emit.lower import Parts
from porter.emit.names import comment, identifier
from porter.emit.numbers import wrap
from porter.port.model import Port
from porter.vectors.model import Suite


@dataclass(frozen=True, slots=True)
class Levels:
    """What the pins read and give: the interface sheet's polarities.

    Args:
        pressed: per button the level at its pin while it is pressed.
        pull_up: per button 1 where its contact goes to ground.
        active: per output the level of its pin while it is active.
    """

    pressed: tuple[int, ...]
    pull_up: tuple[int, ...]
    active: tuple[int, ...]


@dataclass(frozen=True, slots=True)
class Job:
    """What there is to write: the port taken apart, its vectors, what was proved, the pins' levels."""

    parts: Parts
    suite: Suite
    statement: str
    known: Levels | None = None

    @property
    def levels(self) -> Levels:
        """The pins' levels; where nobody said: contacts to ground, outputs active high."""
        buttons, outputs = len(self.port.buttons), len(self.port.outputs)
        return self.known or Levels((0,) * buttons, (1,) * buttons, (1,) * outputs)

    @property
    def port(self) -> Port:
        """The port being written."""
        return self.parts.port

    @property
    def name(self) -> str:
        """The port's name as an identifier for both languages."""
        return identifier(self.port.name)


class Language(Protocol):
    """A language to write a port in: templates, and a context of finished strings for them."""

    #: Template file -> path of the artefact, with ``{name}`` for the port's name.
    files: ClassVar[dict[str, str]]
    #: Where in the job folder the artefacts go.
    folder: str

    def context(self, job: Job) -> dict[str, object]:
        """Return the templates' context."""


def tool() -> str:
    """Return the tool's name and version."""
    from importlib.metadata import PackageNotFoundError, version

    try:
        return f"porter {version('porter')}"
    except PackageNotFoundError:  # run from a checkout that is not installed
        return "porter"


def banner(job: Job, what: str) -> list[str]:
    """Return the header's lines: what this is, where it came from, how to remake it, what was proved."""
    port = job.port
    lines = [
        *wrap(f"{port.title}: {what}."),
        "",
        *wrap(f"Written by {tool()} from {port.spec_file}, SHA-256"),
        comment(port.spec_sha256),
        *wrap(f"Don't edit; remake it with: porter port {port.spec_file} -o DIR"),
    ]
    if job.statement:
        lines += ["", *wrap(job.statement)]
    return lines


def why(port: Port) -> list[str]:
    """Return the planner's choices as comment lines."""
    return [line for sentence in port.why for line in wrap(sentence)]


def microseconds(port: Port) -> int:
    """Return the tick in whole microseconds."""
    return round(port.tick_s * 1e6)
