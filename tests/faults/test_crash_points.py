"""Some crash points of some runs; tests/faults/crash_points.py tries every one."""

from __future__ import annotations

import importlib.util
import os
import sys
from pathlib import Path
from types import ModuleType

import pytest

EVERY = 67


@pytest.fixture(scope="module")
def crash_points() -> ModuleType:
    path = Path(__file__).with_name("crash_points.py")
    spec = importlib.util.spec_from_file_location("crash_points", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules["crash_points"] = module
    spec.loader.exec_module(module)
    return module


@pytest.mark.skipif(not hasattr(os, "fork"), reason="a crash is a forked process")
@pytest.mark.parametrize("number", [0, 9, 10], ids=["refills", "to a pH, with a pause", "a dose by hand"])
def test_what_may_be_on_the_disk_goes_on(crash_points: ModuleType, number: int):
    _, lines, cuts, found = crash_points.one(number, EVERY)
    assert set(found) <= crash_points.FINE
    assert found["sound"] >= 5
    assert lines > 100
    assert cuts > 20_000
