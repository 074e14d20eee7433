"""Made-up runs for every test of this folder."""

import importlib.util
import sys
from pathlib import Path

import pytest


@pytest.fixture(scope="session")
def made():
    """The module made_runs.py beside this file."""
    if "made_runs" not in sys.modules:
        spec = importlib.util.spec_from_file_location("made_runs", Path(__file__).with_name("made_runs.py"))
        sys.modules["made_runs"] = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(sys.modules["made_runs"])
    return sys.modules["made_runs"]
