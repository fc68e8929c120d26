"""The command line: parse, one library call, write. One module a command; heavy parts load when needed.

group.py    the commands, found when asked for     options.py  what every command takes
call.py     what the user asked for, as a record   console.py  results, messages, progress
faults.py   errors, exit codes, interruptions
"""

from __future__ import annotations

import sys
from collections.abc import Sequence


def main(arguments: Sequence[str] | None = None) -> None:
    """Run the command line and end the process with its exit code (0, 1, 2 or 3; 130 when interrupted)."""
    from cohortflow.cli.faults import guarded
    from cohortflow.cli.group import cohortflow

    sys.exit(guarded(cohortflow, arguments))
