"""Makes this folder's helper modules importable for its tests (importlib mode puts no folder on the path)."""

import importlib.util
import sys
from pathlib import Path

for _name in ("simulated_disk", "made_entries"):
    _spec = importlib.util.spec_from_file_location(_name, Path(__file__).with_name(f"{_name}.py"))
    _module = importlib.util.module_from_spec(_spec)
    sys.modules[_name] = _module
    _spec.loader.exec_module(_module)
