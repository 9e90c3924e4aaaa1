"""Let the checks in this folder use the emit room's harness."""

import sys
from pathlib import Path

EMIT = str(Path(__file__).parents[1] / "emit")
if EMIT not in sys.path:
    sys.path.append(EMIT)
