"""The campaign and the fuzzer as modules, and benches with the faults that a test names."""

from __future__ import annotations

import importlib.util
import sys
from collections.abc import Callable
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest

HERE = Path(__file__).parent


def _loaded(name: str) -> ModuleType:
    known = f"halfdrop_faults_{name}"
    if known not in sys.modules:
        spec = importlib.util.spec_from_file_location(known, HERE / f"{name}.py")
        assert spec is not None
        assert spec.loader is not None
        module = importlib.util.module_from_spec(spec)
        sys.modules[known] = module
        spec.loader.exec_module(module)
    return sys.modules[known]


@pytest.fixture(scope="session")
def campaign() -> ModuleType:
    """The campaign script."""
    return _loaded("campaign")


@pytest.fixture(scope="session")
def fuzzer() -> ModuleType:
    """The fuzz script."""
    return _loaded("fuzz")


@pytest.fixture(scope="session")
def week() -> ModuleType:
    """The virtual week."""
    return _loaded("week")


@pytest.fixture
def faulty(campaign: ModuleType) -> Callable[..., Any]:
    """Build a bench with these faults (dicts as in a fault file)."""

    def build(*faults: dict[str, Any], case: str = "acetic", seed: int = 5, contents_ml: float = 10.0) -> Any:
        return campaign.build(case, seed, campaign.settings_of(list(faults), seed), contents_ml=contents_ml)

    return build
