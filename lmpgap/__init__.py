"""lmpgap: where and why linear-dispatch nodal prices diverge from AC ones, and what that is worth.

The names below are the library's front door; they are imported on first use, so that
``import lmpgap`` stays fast and loads no solver.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_HOME: dict[str, str] = {}

__all__ = ["__version__", *_HOME]


def __getattr__(name: str) -> Any:
    if name in _HOME:
        return getattr(import_module(_HOME[name]), name)
    raise AttributeError(f"module 'lmpgap' has no attribute {name!r}")
