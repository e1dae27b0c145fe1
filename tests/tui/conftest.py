"""The test tools beside these tests (gallery, golden, pty_harness) can be imported by their own names."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))
