"""Text of a TOML file -> the line on which each dotted key stands, by a scan of headers and keys.

The scan only serves messages: it never decides what a value is, and a key it cannot find falls back to its table.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass

_HEADER = re.compile(r"^\s*\[{1,2}\s*([^\[\]]+?)\s*\]{1,2}\s*(#.*)?$")
_KEY = re.compile(r"""^\s*((?:[\w-]+|"[^"]*"|'[^']*')(?:\s*\.\s*(?:[\w-]+|"[^"]*"|'[^']*'))*)\s*=""")
_PART = re.compile(r"""[\w-]+|"[^"]*"|'[^']*'""")


@dataclass(frozen=True, slots=True)
class Lines:
    """Dotted key -> 1-based line."""

    known: Mapping[str, int]

    def where(self, key: str) -> str:
        """ "line n" of the key or of the nearest table around it; "" if there is none."""
        parts = key.split(".")
        while parts:
            line = self.known.get(".".join(parts))
            if line is not None:
                return f"line {line}"
            parts.pop()
        return ""


def scan_lines(text: str) -> Lines:
    """Find every header and key of a TOML text; text inside triple quotes is passed over."""
    known: dict[str, int] = {}
    table: list[str] = []
    fence = ""
    for number, line in enumerate(text.splitlines(), start=1):
        if fence:
            fence = "" if line.count(fence) % 2 else fence
            continue
        header, key = _HEADER.match(line), _KEY.match(line)
        if header:
            table = _parts(header.group(1))
            known.setdefault(".".join(table), number)
        elif key:
            path = table + _parts(key.group(1))
            for n in range(len(table) + 1, len(path) + 1):
                known.setdefault(".".join(path[:n]), number)
        fence = next((f for f in ('"""', "'''") if line.count(f) % 2), "")
    return Lines(known)


def _parts(text: str) -> list[str]:
    return [p.strip("\"'") for p in _PART.findall(text)]
