"""The fuzzer's modules are those of a command; the tests import them by the same names."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))
