"""Warnings."""

from __future__ import annotations

from typing import Any


def check_plausibility(*args: Any) -> None: ...
