"""These tests need the adapters of many warehouses; `make portability` runs them in their own environment."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent))
