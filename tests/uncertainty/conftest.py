"""The simulated works' modules, importable by tests and by the processes that campaigns start."""

from __future__ import annotations

import sys
from pathlib import Path

_HERE = str(Path(__file__).parent)
if _HERE not in sys.path:  # a started process takes it over
    sys.path.insert(0, _HERE)
