"""The command line: argparse, commands imported only when called, errors printed in one place.

Exit status: 0 done; 1 finished but not to be trusted, or a check failed; 2 wrong use or settings; 3 stopped for safety
or device failure; 130 interrupted; 143 terminated.
"""

from __future__ import annotations

import sys
from importlib import import_module

from configs.version import __version__
from controller.commandoptions import COMMANDS
from controller.commandparser import WRONG_USE, Parser

DONE, INTERRUPTED = 0, 130


def parser(chosen: str | None = None) -> Parser:
    """Return the command line; only the chosen command's own options are filled in (None: every command's)."""
    top = Parser(
        prog="halfdrop",
        description="Unattended titration: doses, logs every point, detects the end point, and reports an amount.",
        epilog="Safety data sheets, your local rules and licensed practice come before anything this program says.",
    )
    top.add_argument("--version", action="version", version=f"halfdrop {__version__}")
    top.add_argument("--lab", metavar="DIR", dest="screen_lab", help="without a command: the lab folder to open")
    commands = top.add_subparsers(dest="command", metavar="COMMAND", parser_class=Parser)
    for name, (about, fill) in COMMANDS.items():
        made = commands.add_parser(name, help=about, description=about[0].upper() + about[1:] + ".")
        made.set_defaults(parser=made)
        if chosen in (None, name):
            fill(made)
    return top


def main(arguments: list[str] | None = None) -> int:
    """Run one command; return its exit status."""
    for stream in (sys.stdout, sys.stderr):  # a terminal without Unicode shows escapes instead of failing
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="backslashreplace")
    given = sys.argv[1:] if arguments is None else arguments
    whole = parser(chosen=given[0] if given else "")
    if given[:1] == ["--lab"] and len(given) > 2:
        whole.error("--lab belongs behind the command")
    found = whole.parse_whole(given)
    if getattr(found, "function", None) is None:
        if not (sys.stdin.isatty() and sys.stdout.isatty()):
            whole.print_help()
            return DONE
        found.function, found.lab = "controller.commands.watch:open_screen", found.screen_lab
    module, _, name = found.function.partition(":")
    from configs.errors import HalfdropError

    try:
        return int(getattr(import_module(module), name)(found))
    except HalfdropError as error:
        print(f"halfdrop: {error}", file=sys.stderr)
        return error.exit_status
    except KeyboardInterrupt:
        print("halfdrop: interrupted", file=sys.stderr)
        return INTERRUPTED
    except BrokenPipeError:
        sys.stderr.close()
        return DONE
    except OSError as error:
        place = error.filename or "standard output"
        print(f"halfdrop: {place}: {error.strerror or error}. Check the place, and what may be read and written there.",
              file=sys.stderr)  # fmt: skip
        return WRONG_USE


if __name__ == "__main__":
    sys.exit(main())
