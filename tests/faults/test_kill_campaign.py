"""One run of the kill campaign through real processes; tests/faults/kill_campaign.py runs as many as asked for."""

from __future__ import annotations

import importlib.util
import os
import sys
from pathlib import Path
from types import ModuleType

import pytest

SCALE = 40.0  # the campaign itself goes at 10


@pytest.fixture(scope="module")
def campaign() -> ModuleType:
    path = Path(__file__).with_name("kill_campaign.py")
    spec = importlib.util.spec_from_file_location("kill_campaign", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules["kill_campaign"] = module
    spec.loader.exec_module(module)
    return module


@pytest.mark.skipif(os.name != "posix", reason="kill -9 is POSIX; other systems run the campaign by hand")
@pytest.mark.parametrize("seed", [5])
def test_a_killed_run_goes_on_and_loses_nothing(campaign: ModuleType, seed: int):
    outcome = campaign.one(seed, SCALE, None)
    assert outcome.problems == ()
