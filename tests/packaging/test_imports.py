"""What is imported when: heavy libraries only where needed, POSIX-only modules in two files."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
POSIX_ONLY = {"pty", "termios", "fcntl"}
MAY_USE_POSIX = {"simulators.port", "controller.lock"}


def _python(code: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=False)


def test_help_imports_neither_scipy_nor_textual_nor_pydantic() -> None:
    done = _python(
        "import sys\n"
        "from controller.cli import main\n"
        "try:\n    main(['--help'])\nexcept SystemExit:\n    pass\n"
        "heavy = {'scipy', 'textual', 'numpy', 'pydantic', 'yaml', 'serial'} & set(sys.modules)\n"
        "sys.exit(f'imported: {heavy}' if heavy else 0)\n"
    )
    assert done.returncode == 0, done.stderr
    assert "evaluate" in done.stdout


def _modules() -> list[str]:
    found = []
    for package in ("configs", "drivers", "simulators", "controller"):
        for path in sorted((ROOT / package).rglob("*.py")):
            parts = path.relative_to(ROOT).with_suffix("").parts
            found.append(".".join(parts[:-1] if parts[-1] == "__init__" else parts))
    return found


def test_everything_but_two_files_imports_where_posix_modules_are_missing() -> None:
    wanted = [name for name in _modules() if name not in MAY_USE_POSIX]
    assert len(wanted) > 20
    done = _python(
        "import sys\n"
        f"for name in {sorted(POSIX_ONLY)!r}:\n    sys.modules[name] = None\n"
        "import importlib\n"
        f"for name in {wanted!r}:\n    importlib.import_module(name)\n"
    )
    assert done.returncode == 0, done.stderr


def test_scipy_is_imported_only_inside_functions() -> None:
    done = _python(
        "import sys, importlib\n"
        f"for name in {_modules()!r}:\n    importlib.import_module(name)\n"
        "sys.exit('scipy was imported' if 'scipy' in sys.modules else 0)\n"
    )
    assert done.returncode == 0, done.stderr
