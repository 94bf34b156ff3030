"""A parser of command lines which names the nearest known word when it meets an unknown one."""

from __future__ import annotations

import argparse
import os

TYPE_CHECKING = False  # typing itself would cost a tenth of the time that --help may take
if TYPE_CHECKING:
    from typing import Any, NoReturn

WRONG_USE = 2


class Parser(argparse.ArgumentParser):
    """A parser which names the nearest known word when it meets an unknown one."""

    def __init__(self, **settings: Any) -> None:
        settings.setdefault("allow_abbrev", False)
        settings.setdefault("formatter_class", _help_formatter)
        super().__init__(**settings)

    def _check_value(self, action: argparse.Action, value: Any) -> None:
        if action.choices is None or value in action.choices:
            return
        known = [str(choice) for choice in action.choices]
        raise argparse.ArgumentError(
            action, f"got {str(value)!r}, allowed: {', '.join(known)}{_did_you_mean(str(value), known)}"
        )

    def error(self, message: str) -> NoReturn:
        """Print the message and where help is; exit status 2."""
        self.exit(WRONG_USE, f"{self.prog}: {message}\nSee '{self.prog} --help'.\n")

    def parse_whole(self, arguments: list[str]) -> argparse.Namespace:
        """Parse; an unknown option is answered with the nearest known one."""
        found, rest = self.parse_known_args(arguments)
        if rest:
            parser: Parser = getattr(found, "parser", self)
            options = [option for action in parser._actions for option in action.option_strings]
            parser.error(f"unknown: {' '.join(rest)}{_did_you_mean(rest[0].split('=')[0], options)}")
        return found


def _did_you_mean(word: str, known: list[str]) -> str:
    from difflib import get_close_matches

    near = get_close_matches(word, known, n=1)
    return f"; did you mean {near[0]!r}?" if near else ""


def _help_formatter(prog: str) -> argparse.HelpFormatter:
    """As argparse's, but without importing its archive modules for the terminal's width."""
    try:
        width = int(os.environ.get("COLUMNS", "0")) or os.get_terminal_size().columns
    except (OSError, ValueError):
        width = 80
    return argparse.HelpFormatter(prog, width=max(40, width - 2))


def added(actions: Any, name: str, function: str, about: str) -> Parser:
    """Return the parser of one more action of a command, which calls `function` ("module:name")."""
    made: Parser = actions.add_parser(name, help=about, description=about[0].upper() + about[1:] + ".")
    made.set_defaults(function=function, parser=made)
    return made
