"""These tests need the adapters of many warehouses; `make portability` runs them in an environment of their own."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent))
