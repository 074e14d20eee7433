"""Makes the module wire_frames importable by the tests of this folder."""

import importlib.util
import sys
from pathlib import Path

_SPEC = importlib.util.spec_from_file_location("wire_frames", Path(__file__).parents[1] / "drivers" / "wire_frames.py")
if "wire_frames" not in sys.modules:
    _MODULE = importlib.util.module_from_spec(_SPEC)
    sys.modules["wire_frames"] = _MODULE
    _SPEC.loader.exec_module(_MODULE)
