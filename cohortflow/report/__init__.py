"""Records into what people read: charts, tables, pages, printouts. The only room with words, rounding, colour.

Every chart function takes a record or its frame and returns a matplotlib Figure that shows itself in a notebook;
nothing is drawn on a screen and no global setting is touched.
"""

from __future__ import annotations

import importlib
from typing import Any

_HOME = {
    "moves_chart": "chart.moves",
    "state_diagram": "chart.diagram",
    "base_chart": "chart.base",
    "rollforward_chart": "chart.rollforward",
    "settling_chart": "chart.settling",
    "groups_chart": "chart.groups",
    "retention_chart": "chart.retention",
    "exit_time_chart": "chart.exits",
    "exit_reason_chart": "chart.exits",
    "levers_chart": "chart.levers",
    "band_parts_chart": "chart.band_parts",
    "backtest_chart": "chart.backtest",
    "scenarios_chart": "chart.scenarios",
    "svg": "chart.style",
    "approach": "ahead",
    "Facts": "content",
    "Content": "content",
    "gather": "sections",
    "page_html": "page",
    "fragment_html": "page",
    "content_of": "of_run",
    "files_of": "of_run",
    "write_report": "of_run",
    "Table": "table",
    "plain_text": "table",
    "csv_text": "table",
    "json_text": "table",
}
__all__ = list(_HOME)


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module 'cohortflow.report' has no attribute {name!r}")
    return getattr(importlib.import_module(f"cohortflow.report.{_HOME[name]}"), name)


def __dir__() -> list[str]:
    return sorted(__all__)
