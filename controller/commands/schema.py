"""halfdrop schema: JSON Schema of the settings files, for editors."""

from __future__ import annotations

import argparse

from configs.settings import schema as schema_of
from controller.commands.output import print_json


def schema(given: argparse.Namespace) -> int:
    """Print the JSON Schema of a kind of settings file."""
    print_json(schema_of(given.kind))
    return 0
