"""``microsim schema``: print the JSON Schema of study.toml, for editors that complete and check keys."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    Subparsers = argparse._SubParsersAction[argparse.ArgumentParser]


def add_parser(subparsers: Subparsers) -> None:
    """Add the verb to the command line."""
    parser = subparsers.add_parser("schema", help="print the JSON Schema of study.toml")
    parser.set_defaults(run=run)


def run(args: argparse.Namespace) -> int:
    """Print the schema to standard output."""
    import json

    from microsim.study.schema import json_schema

    print(json.dumps(json_schema(), indent=2, ensure_ascii=False))
    return 0
