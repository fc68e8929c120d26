"""`cohortflow fit STUDY`: rates of every move, with intervals."""

from __future__ import annotations

from cohortflow.cli.call import Call
from cohortflow.cli.options import study_command

EXAMPLES = """\
cohortflow fit veg/veg_box.toml
cohortflow fit veg/veg_box.toml --by channel --format csv > rates.csv
cohortflow fit veg/veg_box.toml --set model.window=12 --level 0.95
cohortflow fit panel.csv --exit left"""


@study_command("fit", EXAMPLES)
def command(call: Call) -> int:
    """Count the moves between states and estimate the rate of each, with its interval.

    Intervals are Wilson's, with the number at risk made smaller where customers repeat themselves. STUDY as
    for `check`. CSV: the table transitions.
    """
    from cohortflow.cli.stage import perform
    from cohortflow.report.terminal import fit_text

    return perform(call, "transitions", lambda done: fit_text(done.tables, done.findings, done.study.states))
