"""Tests from outside: the service is a process, and what these tests know of it is its published contract."""

import sys
from pathlib import Path

HERE = str(Path(__file__).parent)
if HERE not in sys.path:
    sys.path.insert(0, HERE)
