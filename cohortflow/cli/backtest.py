"""`cohortflow backtest STUDY`: past forecasts against what happened, model against model."""

from __future__ import annotations

from typing import TYPE_CHECKING

from cohortflow.cli.call import Call
from cohortflow.cli.options import study_command

if TYPE_CHECKING:
    from cohortflow.runs.folder import Run

EXAMPLES = """\
cohortflow backtest veg/veg_box.toml
cohortflow backtest veg/veg_box.toml --model best      every model; which is chosen, by how much
cohortflow backtest veg/veg_box.toml --horizon 6 --format csv > backtest.csv"""


@study_command("backtest", EXAMPLES)
def command(call: Call) -> int:
    """Refit at past origins, forecast, and hold the forecasts against what happened.

    The study's model stands beside the plain one (with --model best: every model) and beside rivals that need
    no chain: the last mix carried forward, a constant churn rate, the same period of last year, the observed
    cohort curve. STUDY as for `check`. CSV: the table of origins, horizons and quantities.
    """
    from cohortflow.cli.stage import perform
    from cohortflow.errors import NotIdentified
    from cohortflow.report.terminal import backtest_text

    def words(done: Run) -> str:
        if done.backtest is None:
            raise NotIdentified(done.absent["backtest"])
        kind = done.study.calendar.kind
        return backtest_text(done.findings, done.backtest, done.choice, model=done.study.model.name, kind=kind)

    return perform(call, "backtest", words)
