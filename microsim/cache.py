"""Where this user's reusable files lie: compiled kernels and stored fits. Safe to delete at any time."""

from __future__ import annotations

import os
from pathlib import Path


def cache_root() -> Path:
    """``$MICROSIM_CACHE``, else the platform's per-user cache folder, plus ``microsim``."""
    base = os.environ.get("MICROSIM_CACHE") or os.environ.get("LOCALAPPDATA") or os.environ.get("XDG_CACHE_HOME")
    return (Path(base) if base else Path.home() / ".cache") / "microsim"
