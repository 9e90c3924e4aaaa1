"""Find the template and spec files that ship with porter.

In a checkout ``templates/`` and ``specs/`` sit beside the package; a wheel
carries them inside it.  This module is the only place that knows.
"""

from importlib.resources import files
from importlib.resources.abc import Traversable
from pathlib import Path

from jinja2 import Environment, FunctionLoader, StrictUndefined


def folder(name: str) -> Traversable:
    """Return the shipped folder *name*, ``templates`` or ``specs``."""
    installed = files("porter") / name
    return installed if installed.is_dir() else Path(__file__).parents[1] / name


def resource(name: str) -> Traversable:
    """Return the shipped file *name*, such as ``templates/report.html.j2``."""
    top, *rest = name.split("/")
    found = folder(top)
    for part in rest:
        found = found / part
    return found


def _load(name: str) -> tuple[str, str, None] | None:
    item = resource(f"templates/{name}")
    # str(item) puts the file's real path in Jinja's tracebacks.
    return (item.read_text("utf-8"), str(item), None) if item.is_file() else None


def environment() -> Environment:
    """Return the template environment: strict, and escaping in HTML only."""
    return Environment(
        loader=FunctionLoader(_load),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
        autoescape=lambda name: bool(name) and str(name).endswith(".html.j2"),
    )
