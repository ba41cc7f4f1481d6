"""From the tables of a run to the typed view model of the report."""

from lmpgap.report.view.build import build_view
from lmpgap.report.view.model import WeeklyView

__all__ = ["WeeklyView", "build_view"]
