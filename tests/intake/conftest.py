"""Makes the writers of exports importable from all tests of intake."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))
