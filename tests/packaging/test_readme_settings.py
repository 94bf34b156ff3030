"""The settings that the README shows are settings that the program takes."""

from __future__ import annotations

import re
from pathlib import Path

from configs.dialectfile import DialectSettings
from configs.loading import parse
from configs.settings import shipped_bench

ROOT = Path(__file__).resolve().parents[2]


def _blocks() -> list[str]:
    return re.findall(
        r"^```yaml\n(.*?)^```", (ROOT / "README.md").read_text(encoding="utf-8"), re.MULTILINE | re.DOTALL
    )


def test_the_dialect_of_the_readme_loads() -> None:
    (text,) = [block for block in _blocks() if block.startswith("schema_version: 1\nname: our-pump")]
    assert parse(text.encode(), DialectSettings, where="README").unfit_unattended() is None


def test_the_bench_of_the_readme_loads() -> None:
    from configs.benchfile import BenchSettings

    (text,) = [block for block in _blocks() if block.startswith("pump:\n  port: OL-7")]
    shipped = shipped_bench()
    whole = f"name: ours\nvessel: {{capacity_ml: {shipped.vessel.capacity_ml}}}\n{text}"
    bench = parse(whole.encode(), BenchSettings, where="README")
    assert (bench.pump.speaks, bench.probe.speaks) == ("dialect", "modbus")
