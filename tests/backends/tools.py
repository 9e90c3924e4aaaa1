"""Finds and runs the tools of the system that the backends need."""

import os
import shutil
import subprocess
from collections.abc import Sequence
from pathlib import Path

import pytest

#: Where `.ci/build-spdk` leaves the PDK emulator, unless it is on the path.
SPDK_FOLDER = Path(os.environ.get("PORTER_SPDK", Path.home() / ".cache" / "porter-spdk"))
DRIVERS = Path(__file__).with_name("drivers")
#: More than any one run needs; a run that hangs is a failure.
PATIENCE_S = 900


def find(tool: str) -> str | None:
    """Return the path of a tool, or None."""
    return shutil.which(tool) or shutil.which(tool, path=str(SPDK_FOLDER))


def need(*tools: str) -> None:
    """Skip the test where a tool is missing; with PORTER_SYSTEM=1 fail it, so that CI can't pass by skipping."""
    missing = [tool for tool in tools if find(tool) is None]
    if not missing:
        return
    reason = f"not installed: {', '.join(missing)} (see .ci/system-packages and .ci/build-spdk)"
    if os.environ.get("PORTER_SYSTEM") == "1":
        pytest.fail(reason)
    pytest.skip(reason)


def must(command: Sequence[str | Path], where: Path, *, text: str | None = None) -> str:
    """Run a command that must succeed in a folder; return what it printed.

    Args:
        text: what the command reads from its standard input; nothing where None.
    """
    first = find(str(command[0])) or str(command[0])
    done = subprocess.run(
        [first, *command[1:]], cwd=where, capture_output=True, text=True, input=text or "", timeout=PATIENCE_S
    )
    assert done.returncode == 0, f"{command[0]} ended with {done.returncode}\n{done.stdout}{done.stderr}"
    return done.stdout
