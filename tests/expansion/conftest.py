"""The benchmarks' reference functions are used by the tests too."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1] / "bench"))
