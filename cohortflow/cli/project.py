"""`cohortflow project STUDY`: the mix period by period, where it settles, time to exit."""

from __future__ import annotations

from cohortflow.cli.call import Call
from cohortflow.cli.options import study_command

EXAMPLES = """\
cohortflow project veg/veg_box.toml
cohortflow project veg/veg_box.toml --horizon 6 --level 0.8 --format csv > ahead.csv
cohortflow project veg/veg_box.toml --set joiners.method=none     the base without joiners
cohortflow project veg/veg_box.toml --out ahead                   all its tables as CSV"""


@study_command("project", EXAMPLES)
def command(call: Call) -> int:
    """Project the base by state, with bands: where it settles, how long customers stay, how they leave.

    STUDY as for `check`. CSV: the table projection; --out writes the others too.
    """
    from cohortflow.cli.stage import perform
    from cohortflow.report.terminal import project_text

    return perform(
        call,
        "projection",
        lambda done: project_text(
            done.tables,
            done.findings,
            done.study.states,
            kind=done.study.calendar.kind,
            totals=tuple(done.study.totals),
            verdict=done.forecasts["all"].long_run.verdict,
        ),
    )
