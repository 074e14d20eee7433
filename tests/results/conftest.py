"""Made-up runs for every test of this folder."""

import importlib.util
import sys
from pathlib import Path

import pytest

_SPEC = importlib.util.spec_from_file_location("made_runs", Path(__file__).with_name("made_runs.py"))
_MODULE = importlib.util.module_from_spec(_SPEC)
sys.modules["made_runs"] = _MODULE
_SPEC.loader.exec_module(_MODULE)


@pytest.fixture(scope="session")
def made():
    """The module tests/results/made_runs.py."""
    return _MODULE
