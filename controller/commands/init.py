"""halfdrop init: make a lab folder, or see what a newer version would change in one."""

from __future__ import annotations

import argparse
from pathlib import Path

from controller.labfolder import LabError, find_lab, init_lab, upgrade_lab


def init(given: argparse.Namespace) -> int:
    """Make a lab folder with the simulated bench and the shipped methods."""
    folder = Path(given.dir)
    if given.upgrade:
        changes = upgrade_lab(folder)
        print("\n".join(changes) if changes else f"{folder}: up to date, nothing to change")
        return 0
    outer = _lab_around(folder)
    made = init_lab(folder)
    for path in made:
        print(f"made {path}")
    if not made:
        print(f"{folder}: everything is there already")
    if outer is not None:
        print(f"note: it lies inside another lab folder, {outer}; commands given inside it use the inner one")
    print(
        f"The bench in {folder / 'bench.yaml'} is a simulated one; describe your own there. Start with:\n"
        f"  halfdrop bench show --lab {folder}"
    )
    return 0


def _lab_around(folder: Path) -> Path | None:
    """Return the lab folder that a new one would lie in."""
    try:
        return find_lab(environment={}, start=folder.resolve().parent).path
    except LabError:
        return None
