"""Files that ship with the package, read through importlib.resources so that a zipped installation works too."""

from __future__ import annotations

from importlib.resources import files
from typing import Any

import yaml

from configs.errors import HalfdropError
from configs.nearest import did_you_mean

_Loader = getattr(yaml, "CSafeLoader", yaml.SafeLoader)  # the C parser is about 8 times faster where it is built in


def read_shipped_yaml(name: str) -> Any:
    """Return the content of a data file of this package (trusted: no strict checks)."""
    return yaml.load(files("configs").joinpath(name).read_bytes(), Loader=_Loader)


def shipped_names(folder: str) -> tuple[str, ...]:
    """Return the names, without .yaml, of the files shipped in a folder of this package, sorted."""
    entries = files("configs").joinpath(folder).iterdir()
    return tuple(sorted(entry.name.removesuffix(".yaml") for entry in entries if entry.name.endswith(".yaml")))


def shipped_bytes(folder: str, name: str) -> bytes:
    """Return the bytes of a shipped file, comments and all.

    Raises:
        HalfdropError: nothing of this name is shipped; the nearest names are in the text.
    """
    names = shipped_names(folder)
    if name not in names:
        raise HalfdropError(
            f"nothing of the name {name!r} is shipped{did_you_mean(name, names)}",
            where=folder,
            remedy=f"Use one of: {', '.join(names)}",
        )
    return files("configs").joinpath(folder, f"{name}.yaml").read_bytes()
