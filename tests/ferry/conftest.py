"""Makes the tests' own reckoning of the ferry importable from all tests of it."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))
