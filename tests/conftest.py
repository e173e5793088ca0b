"""Puts this folder on the path, so that every test can say ``import exact``."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))
