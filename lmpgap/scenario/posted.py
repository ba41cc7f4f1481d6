"""Posted."""

from __future__ import annotations

from typing import Any

from lmpgap.scenario.parse import to_typed


def read_posted(spec: Any, raw: Any, settings: Any, log: Any) -> Any:
    return to_typed(spec, raw, log)
