"""Test modules share the rigs that lie beside them."""

import sys
from pathlib import Path

from hypothesis import settings

sys.path.insert(0, str(Path(__file__).parent))
# Shared machines are noisy: a property is about values, not time; and a suite says the same twice.
settings.register_profile("moire", deadline=None, derandomize=True)
settings.load_profile("moire")
