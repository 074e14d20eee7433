"""Makes the helper modules of the driver tests importable by the tests of this folder."""

import importlib.util
import sys
from pathlib import Path

_TESTS = Path(__file__).resolve().parents[1]
for _name, _folder in (("wire_frames", "drivers"), ("little_machine", "contract")):
    if _name not in sys.modules:
        _spec = importlib.util.spec_from_file_location(_name, _TESTS / _folder / f"{_name}.py")
        _module = importlib.util.module_from_spec(_spec)
        sys.modules[_name] = _module
        _spec.loader.exec_module(_module)
