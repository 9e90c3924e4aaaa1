"""Timing: processor seconds, so that other work on the machine counts little."""

import resource
import subprocess
import time
from collections.abc import Callable, Sequence


def seconds(work: Callable[[], object], rounds: int = 5) -> float:
    """Return the least processor seconds that *work* took in some rounds."""
    found = []
    for _ in range(rounds):
        before = time.process_time()
        work()
        found.append(time.process_time() - before)
    return min(found)


def command_seconds(command: Sequence[str], rounds: int = 5) -> float:
    """The same for a command in a process of its own, start-up included."""
    found = []
    for _ in range(rounds):
        before = _children()
        subprocess.run(command, check=True, capture_output=True)
        found.append(_children() - before)
    return min(found)


def _children() -> float:
    usage = resource.getrusage(resource.RUSAGE_CHILDREN)
    return usage.ru_utime + usage.ru_stime
