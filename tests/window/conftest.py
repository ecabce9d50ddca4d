"""Tests of what Downwarp shows in a window. Those that need no window run without one."""

import sys
from pathlib import Path

# test_window.py imports play.py.
sys.path.append(str(Path(__file__).parent))
