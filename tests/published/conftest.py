"""The slow twins (tests/twins) can be imported by their package's name; last on the path, so that nothing is hidden."""

import sys
from pathlib import Path

sys.path.append(str(Path(__file__).parents[1]))
