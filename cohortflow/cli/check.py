"""`cohortflow check STUDY`: read, label, account for every row."""

from __future__ import annotations

from cohortflow.cli.call import Call
from cohortflow.cli.options import study_command

EXAMPLES = """\
cohortflow check veg/veg_box.toml
cohortflow check veg/veg_box.toml --strict --quiet    for a pipeline: code 1 on a finding
cohortflow check veg/veg_box.toml --out checked       accounting and rejected rows as CSV
cohortflow check log.csv --exit cancelled             a bare file: customer, time, event"""


@study_command("check", EXAMPLES)
def command(call: Call) -> int:
    """Read and label every row of the extract and say what became of it; no figures yet.

    STUDY is a study file (TOML), or a data file with the columns customer, period, state or customer, time,
    event. With --out the accounting and the rejected rows (without their values) are written. CSV: the
    accounting.
    """
    from cohortflow.cli.stage import perform
    from cohortflow.report.terminal import check_text

    return perform(call, "accounting", lambda done: check_text(done.tables, done.findings))
