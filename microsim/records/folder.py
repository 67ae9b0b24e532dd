"""A result folder that appears whole or not at all: everything is written beside it and renamed at the end."""

from __future__ import annotations

import json
import os
import shutil
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pandas as pd

from microsim.errors import Fault, InputError


def refuse_existing(target: Path) -> None:
    """Raise InputError if the folder is already there with something in it, or cannot be made."""
    if target.is_file() or (target.is_dir() and any(target.iterdir())):
        raise InputError(
            [
                Fault(
                    "command line",
                    "--out",
                    "there are results already",
                    "Name a new folder; nothing is overwritten.",
                    str(target),
                )
            ]
        )


@contextmanager
def new_folder(target: Path) -> Iterator[Path]:
    """A scratch folder that becomes ``target`` when the block ends well, and vanishes when it does not."""
    refuse_existing(target)
    made_parent = not target.parent.exists()
    target.parent.mkdir(parents=True, exist_ok=True)
    scratch = Path(tempfile.mkdtemp(prefix=f".{target.name}-", dir=target.parent))
    try:
        yield scratch
        scratch.chmod(0o755)
        if target.is_dir():
            target.rmdir()
        os.replace(scratch, target)
    finally:
        shutil.rmtree(scratch, ignore_errors=True)
        if made_parent and not any(target.parent.iterdir()):
            target.parent.rmdir()


def write_tables(folder: Path, tables: Mapping[str, pd.DataFrame]) -> None:
    """Each table as CSV and Parquet under ``tables``."""
    place = folder / "tables"
    place.mkdir()
    for name, table in tables.items():
        table.to_csv(place / f"{name}.csv", index=False)
        table.to_parquet(place / f"{name}.parquet", index=False)


def write_json(path: Path, content: Mapping[str, Any]) -> None:
    path.write_text(json.dumps(content, indent=2, ensure_ascii=False, allow_nan=False) + "\n", encoding="utf-8")
