"""The made-up runs of tests/results, for pictures of whole series."""

import importlib.util
import sys
from pathlib import Path

import pytest


@pytest.fixture(scope="session")
def made():
    """The module tests/results/made_runs.py."""
    if "made_runs" not in sys.modules:
        path = Path(__file__).resolve().parents[1] / "results" / "made_runs.py"
        spec = importlib.util.spec_from_file_location("made_runs", path)
        sys.modules["made_runs"] = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(sys.modules["made_runs"])
    return sys.modules["made_runs"]
