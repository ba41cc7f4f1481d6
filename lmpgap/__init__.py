"""lmpgap: where and why linear-dispatch nodal prices diverge from AC ones, and what that is worth.

The names below are the library's front door; they are imported on first use, so that
``import lmpgap`` stays fast and loads no solver.

- `read_scenario`: read and check a scenario folder
- `price`: solve, split and certify every interval into a run folder
- `compare`: where two price sets of a run differ, and why
- `settle`: money on the loss-component error of posted prices
- `weekly_report`: all of it, with the report
- `RunFolder`: the tables of a run as data frames
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from lmpgap.errors import LmpgapError
    from lmpgap.runs.folder import RunFolder
    from lmpgap.runs.price import price
    from lmpgap.scenario.read import read_scenario
    from lmpgap.settlement.settle import settle
    from lmpgap.weekly import compare_one as compare
    from lmpgap.weekly import weekly_report

__version__ = "0.1.0"

_HOME: dict[str, tuple[str, str]] = {
    "LmpgapError": ("lmpgap.errors", "LmpgapError"),
    "RunFolder": ("lmpgap.runs.folder", "RunFolder"),
    "compare": ("lmpgap.weekly", "compare_one"),
    "price": ("lmpgap.runs.price", "price"),
    "read_scenario": ("lmpgap.scenario.read", "read_scenario"),
    "settle": ("lmpgap.settlement.settle", "settle"),
    "weekly_report": ("lmpgap.weekly", "weekly_report"),
}

__all__ = ["LmpgapError", "RunFolder", "__version__", "compare", "price", "read_scenario", "settle", "weekly_report"]


def __getattr__(name: str) -> Any:
    if name in _HOME:
        module, attribute = _HOME[name]
        return getattr(import_module(module), attribute)
    raise AttributeError(f"module 'lmpgap' has no attribute {name!r}")
