"""The painter of the demo sky, imported from its file."""

from __future__ import annotations

import importlib.util
import sys
from functools import cache
from pathlib import Path
from types import ModuleType

DEMO_MAPS = Path(__file__).resolve().parents[1] / "demo_maps"


@cache
def load_demo() -> ModuleType:
    """Import ``demo_maps/make_demo.py`` once."""
    spec = importlib.util.spec_from_file_location("make_demo", DEMO_MAPS / "make_demo.py")
    module = importlib.util.module_from_spec(spec)
    sys.modules["make_demo"] = module
    spec.loader.exec_module(module)
    return module
