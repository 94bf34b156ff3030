"""The lab folder: lab.yaml, bench.yaml, methods, records. Made by `halfdrop init`, found from anywhere inside it."""

from __future__ import annotations

import os
import re
from pathlib import Path

from configs.errors import HalfdropError

TYPE_CHECKING = False  # typing itself would cost a good part of the time that a listing may take
if TYPE_CHECKING:
    from collections.abc import Mapping

LAB_SCHEMA_VERSION = 1
LAB_FILE = "lab.yaml"
FOLDERS = ("methods", "runs", "calibrations", "logs")
_LAB_TEXT = """\
# A halfdrop lab folder. Keep it whole: the records in runs/ are what your results rest on.
schema_version: {version}
"""
_VERSION = re.compile(r"^schema_version\s*:\s*(\d+)\s*(#.*)?$", re.MULTILINE)
_REMEDY = "Make one with 'halfdrop init DIR', or name it with --lab DIR or HALFDROP_LAB"


class LabError(HalfdropError):
    """No lab folder, or not one that can be used so."""


class Lab:
    """A lab folder and how it was found.

    Attributes:
        path: the folder.
        found_by: "--lab", "HALFDROP_LAB" or "the nearest parent with lab.yaml", for people.
        schema_version: of its lab.yaml.
    """

    def __init__(self, *, path: Path, found_by: str, schema_version: int) -> None:
        self.path, self.found_by, self.schema_version = path, found_by, schema_version

    @property
    def read_only(self) -> bool:
        """True where a newer program made the folder: it is read, never written."""
        return self.schema_version > LAB_SCHEMA_VERSION

    @property
    def runs(self) -> Path:
        """The folder of the records."""
        return self.path / "runs"

    @property
    def methods(self) -> Path:
        """The folder of the methods."""
        return self.path / "methods"

    @property
    def calibrations(self) -> Path:
        """The folder of the calibrations' records."""
        return self.path / "calibrations"

    @property
    def bench(self) -> Path:
        """The bench file."""
        return self.path / "bench.yaml"

    def says(self) -> str:
        """Return which folder is used and why, for people."""
        newer = ", made by a newer halfdrop: read only" if self.read_only else ""
        return f"lab folder {self.path} ({self.found_by}{newer})"

    def writable(self) -> Lab:
        """Return this folder for writing.

        Raises:
            LabError: a newer program made it.
        """
        if self.read_only:
            raise LabError(
                f"schema_version {self.schema_version}; this program writes {LAB_SCHEMA_VERSION}",
                where=str(self.path / LAB_FILE),
                remedy="Use a newer halfdrop to run there; reading works",
            )
        return self


def find_lab(
    option: str | None = None, *, environment: Mapping[str, str] | None = None, start: Path | None = None
) -> Lab:
    """Return the lab folder to use: the option's, else HALFDROP_LAB's, else the nearest parent with lab.yaml.

    Args:
        option: what `--lab` said.
        environment: default: the process's.
        start: where the search upwards begins; default: the working folder.

    Raises:
        LabError: there is none, or its lab.yaml tells no schema version.
    """
    known = os.environ if environment is None else environment
    for found_by, named in (("--lab", option), ("HALFDROP_LAB", known.get("HALFDROP_LAB"))):
        if named:
            return _opened(Path(named).expanduser(), found_by)
    begin = Path.cwd() if start is None else start
    for folder in (begin, *begin.parents):
        if (folder / LAB_FILE).is_file():
            return _opened(folder, f"the nearest parent with {LAB_FILE}")
    raise LabError(f"no lab folder here or above: no {LAB_FILE}", where=str(begin), remedy=_REMEDY)


def init_lab(folder: Path, *, bench: str = "simulated") -> list[Path]:
    """Make a lab folder with the shipped bench and methods; what a lab folder already has is left as it is.

    Args:
        folder: new, empty, or a lab folder that lacks something.
        bench: name of the shipped bench that becomes bench.yaml.

    Returns:
        The files and folders that were made.

    Raises:
        LabError: a file is in the way, the folder holds other things, or it cannot be written.
    """
    from configs.shipped import shipped_bytes, shipped_names

    if folder.exists() and not folder.is_dir():
        raise LabError("it is a file", where=str(folder), remedy="Name a new folder")
    if folder.is_dir() and not (folder / LAB_FILE).is_file() and any(folder.iterdir()):
        raise LabError(
            f"it holds other things and no {LAB_FILE}", where=str(folder), remedy="Name a new or an empty folder"
        )
    if (folder / LAB_FILE).is_file():
        _opened(folder, "init").writable()
    wanted = {f"methods/{name}.yaml": shipped_bytes("methods", name) for name in shipped_names("methods")}
    wanted["bench.yaml"] = shipped_bytes("benches", bench)
    wanted[LAB_FILE] = _LAB_TEXT.format(version=LAB_SCHEMA_VERSION).encode()
    try:
        return _made(folder, wanted)
    except OSError as error:
        raise LabError(
            f"it cannot be written ({error.strerror})", where=str(folder), remedy="Choose another place"
        ) from error


def upgrade_lab(folder: Path) -> list[str]:
    """Bring a lab folder to this program's schema version; each changed file keeps a copy ending in .bak.

    Returns:
        What was changed, a line each; empty: it was up to date. Records are never rewritten.

    Raises:
        LabError: it is no lab folder, or a newer program made it.
    """
    _opened(folder, "init --upgrade").writable()
    return []  # version 1 is the first: nothing older exists


def _made(folder: Path, wanted: Mapping[str, bytes]) -> list[Path]:
    made: list[Path] = []
    for inner in (folder, *(folder / name for name in FOLDERS)):
        if not inner.is_dir():
            inner.mkdir(parents=True)
            made.append(inner)
    for name, content in wanted.items():  # lab.yaml last: what is cut short is no lab folder yet
        path = folder / name
        if not path.exists():
            path.write_bytes(content)
            made.append(path)
    return made


def _opened(folder: Path, found_by: str) -> Lab:
    path = folder / LAB_FILE
    try:
        found = _VERSION.search(path.read_text(encoding="utf-8-sig"))
    except FileNotFoundError:
        raise LabError(f"no {LAB_FILE} in it", where=str(folder), remedy=_REMEDY) from None
    except (OSError, UnicodeDecodeError) as error:
        raise LabError(f"it cannot be read ({error})", where=str(path), remedy="Correct the file") from error
    if found is None:
        raise LabError(
            "no line 'schema_version: NUMBER'",
            where=str(path),
            remedy=f"Add the line 'schema_version: {LAB_SCHEMA_VERSION}'",
        )
    return Lab(path=folder.resolve(), found_by=found_by, schema_version=int(found[1]))
