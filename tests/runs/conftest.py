"""Puts `runs_samples` where worker processes find it too."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))
