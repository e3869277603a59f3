"""Lets the tests of this folder import their shared sheets."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))
