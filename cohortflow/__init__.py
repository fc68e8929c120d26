"""Customer lifecycle and churn projection: from raw event logs to a forecast that can be defended.

The public names in reading order, each with the module that defines it: they load on first use, so that
`import cohortflow` is light.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

_HOME = {
    "CohortflowError": "errors",
    "States": "states",
    "Calendar": "periods",
    "read_study": "study.reading",
    "read": "history.door",
    "read_events": "history.door",
    "read_history": "history.door",
    "read_wide": "history.door",
    "read_spells": "history.door",
    "read_counts": "history.door",
    "count": "history.door",
    "Tally": "tally",
    "Chain": "chain",
    "Schedule": "chain",
    "Draws": "chain",
    "fit": "estimator.fit",
    "project": "projector.project",
    "long_run": "projector.longrun",
    "time_to_exit": "projector.exits",
    "retention": "projector.retention",
    "value": "projector.value",
    "adequacy": "assessment.adequacy",
    "backtest": "assessment.backtest",
    "Change": "whatif.change",
    "Scenario": "whatif.scenario",
    "what_if": "whatif.what_if",
    "sensitivity": "whatif.levers",
    "required_change": "whatif.required",
    "compare_arms": "whatif.arms",
    "trial_size": "whatif.trial_size",
    "panel": "report.panel.render",
    "run": "runs.folder",
    "compare": "runs.comparison",
    "write_report": "report.of_run",
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
