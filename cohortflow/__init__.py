"""Customer lifecycle and churn projection: from raw event logs to a forecast that can be defended.

The public names in reading order; the parts behind them load on first use, so `import cohortflow` is light.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

_HOME = {
    "CohortflowError": "errors",
    "States": "states",
    "Calendar": "periods",
    "read_study": "study",
    "read": "history",
    "read_events": "history",
    "read_history": "history",
    "read_counts": "history",
    "count": "history",
    "Tally": "tally",
    "Chain": "chain",
    "Schedule": "chain",
    "Draws": "chain",
    "fit": "estimator",
    "project": "projector",
    "long_run": "projector",
    "time_to_exit": "projector",
    "retention": "projector",
    "value": "projector",
    "adequacy": "assessment",
    "backtest": "assessment",
    "Change": "whatif",
    "Scenario": "whatif",
    "what_if": "whatif",
    "sensitivity": "whatif",
    "required_change": "whatif",
    "compare_arms": "whatif",
    "trial_size": "whatif",
    "run": "runs",
    "write_report": "report",
}
__all__ = ["__version__", *_HOME]

if TYPE_CHECKING:
    from cohortflow.chain import Chain as Chain
    from cohortflow.chain import Draws as Draws
    from cohortflow.chain import Schedule as Schedule
    from cohortflow.errors import CohortflowError as CohortflowError
    from cohortflow.periods import Calendar as Calendar
    from cohortflow.states import States as States
    from cohortflow.tally import Tally as Tally


def __getattr__(name: str) -> Any:
    if name == "report":  # charts and tables: cf.report.moves_chart(fit)
        return importlib.import_module("cohortflow.report")
    if name not in _HOME:
        raise AttributeError(f"module 'cohortflow' has no attribute {name!r}")
    return getattr(importlib.import_module(f"cohortflow.{_HOME[name]}"), name)


def __dir__() -> list[str]:
    return sorted(__all__)
