"""halfdrop init: make a lab folder, or see what a newer version would change in one."""

from __future__ import annotations

import argparse
from pathlib import Path

from controller.labfolder import init_lab, upgrade_lab


def init(given: argparse.Namespace) -> int:
    """Make a lab folder with the simulated bench and the shipped methods."""
    folder = Path(given.dir)
    if given.upgrade:
        changes = upgrade_lab(folder)
        print("\n".join(changes) if changes else f"{folder}: up to date, nothing to change")
        return 0
    made = init_lab(folder)
    for path in made:
        print(f"made {path}")
    if not made:
        print(f"{folder}: everything is there already")
    print(
        f"The bench in {folder / 'bench.yaml'} is a simulated one; describe your own there. Start with:\n"
        f"  halfdrop bench show --lab {folder}"
    )
    return 0
