"""Loads the checkout as the package ``downwarp_checkout``, whatever its folder is called."""

import importlib.util
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]

if "downwarp_checkout" not in sys.modules:
    spec = importlib.util.spec_from_file_location(
        "downwarp_checkout", ROOT / "__init__.py", submodule_search_locations=[str(ROOT)]
    )
    package = importlib.util.module_from_spec(spec)
    sys.modules["downwarp_checkout"] = package
    spec.loader.exec_module(package)
