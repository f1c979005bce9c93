"""Lets the tests of this folder, and the study of tracing, share the phantom and the scoring beside them."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))
