"""The specs that ship with porter, to begin from."""

from pathlib import Path

from porter.findings import PorterError
from porter.resources import folder


class CopyError(PorterError):
    """The copy can't be written."""


def names() -> list[str]:
    """Return the names of the shipped specs, the faulty ones last."""
    found = (item.name for item in folder("specs").iterdir() if item.name.endswith(".yaml"))
    return sorted((name.removesuffix(".yaml") for name in found), key=lambda n: (n.startswith("faulty_"), n))


def text(name: str) -> str:
    """Return the text of a shipped spec."""
    return (folder("specs") / f"{name}.yaml").read_bytes().decode()


def title(name: str) -> str:
    """Return what a shipped spec is about: its ``circuit`` line."""
    lines = text(name).splitlines()
    return next((line.removeprefix("circuit:").strip() for line in lines if line.startswith("circuit:")), "")


def listing() -> str:
    """Return the shipped specs, one a line, with what each is about."""
    known = names()
    width = max(map(len, known), default=0)
    return "".join(f"{name:{width}}  {title(name)}\n" for name in known)


def copy(name: str, target: Path) -> None:
    """Copy a shipped spec to a file that must not exist yet.

    Raises:
        CopyError: the file exists, or can't be written; nothing has been changed.
    """
    try:
        with target.open("xb") as stream:
            stream.write(text(name).encode())
    except FileExistsError:
        raise CopyError(f"`{target}` exists and is not written over: give another file with -o") from None
    except OSError as error:
        raise CopyError(f"can't write `{target}`: {error.strerror or error}") from error
