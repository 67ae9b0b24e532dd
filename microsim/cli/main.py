"""The ``microsim`` command: finds the verb, turns exceptions into messages and exit codes. Imports nothing heavy.

Exit codes: 0 done, 1 a run failed, 2 bad input, 130 interrupted.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence

from microsim import __version__
from microsim.cli import check, run, schema
from microsim.errors import InputError, MicrosimError

VERBS = {"run": run, "check": check, "schema": schema}


def build_parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="microsim",
        description="May a memoryless cohort stand in for patients with a history? One study folder in, a verdict out.",
        epilog="Results inform decisions about health: they are not validated for clinical use.",
    )
    parser.add_argument("--version", action="version", version=f"microsim {__version__}")
    verbs = parser.add_subparsers(dest="verb", metavar="VERB", required=True)
    for module in VERBS.values():
        module.add_parser(verbs)
    return parser


def report_faults(error: InputError) -> None:
    """All faults, one paragraph each, to standard error."""
    n = len(error.faults)
    print(f"{n} fault{'s' if n != 1 else ''} found; nothing was run and nothing was written.", file=sys.stderr)
    for fault in error.faults:
        print(f"  {fault}", file=sys.stderr)


def main(argv: Sequence[str] | None = None) -> int:
    """Run one verb; returns the exit code."""
    arguments = build_parser().parse_args(argv)
    try:
        code: int = VERBS[arguments.verb].run(arguments)
        return code
    except InputError as error:
        report_faults(error)
        return error.exit_code
    except MicrosimError as error:
        print(f"microsim: {error}", file=sys.stderr)
        return error.exit_code
    except KeyboardInterrupt:
        print("\nInterrupted; no half-written results were left.", file=sys.stderr)
        return 130
    except BrokenPipeError:
        sys.stderr.close()
        return 1


if __name__ == "__main__":
    raise SystemExit(main())
