"""The house as agreed: top level, direction of imports, README's two commands."""

from __future__ import annotations

import re
import subprocess
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
TOP = {"README.md", "DEVELOPERS.md", "CHANGELOG.md", "LICENSE", "pyproject.toml", "uv.lock"}
ROOMS = ("configs", "drivers", "simulators", "controller")


def test_top_level_holds_only_what_is_agreed() -> None:
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False)
    if listed.returncode != 0 or not listed.stdout.strip():
        pytest.skip("not a git checkout: the list of kept files is not to be had")
    tops = {line.split("/")[0] for line in listed.stdout.splitlines()}
    assert {top for top in tops if not top.startswith(".")} - TOP - {*ROOMS, "tests"} == set()


@pytest.mark.parametrize(("room", "above"), [(room, ROOMS[index + 1 :]) for index, room in enumerate(ROOMS)])
def test_imports_point_downwards(room: str, above: tuple[str, ...]) -> None:
    for path in (ROOT / room).rglob("*.py"):
        for name in above:
            found = re.search(rf"^\s*(from|import) {name}\b", path.read_text(encoding="utf-8"), re.MULTILINE)
            assert found is None, f"{path} imports {name}"


@pytest.mark.parametrize("tag", ["demo", "test"])
def test_readme_has_the_two_commands_each_on_one_line(tag: str) -> None:
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    blocks = re.findall(rf"^```sh {tag}\n(.*?)^```", text, re.MULTILINE | re.DOTALL)
    assert len(blocks) == 1
    assert len(blocks[0].strip().splitlines()) == 1
