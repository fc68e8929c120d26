"""`--dry-run`: what would be read and written, and where each setting comes from."""

from __future__ import annotations

from pathlib import Path

from cohortflow.cli.call import Call
from cohortflow.history.sources import found_files
from cohortflow.runs.place import check_free
from cohortflow.study import Study


def plan_text(call: Call, study: Study, out: Path | None) -> str:
    """Files with their sizes, settings from elsewhere than the file, the folder; refusals as in earnest."""
    lines = [f"{call.command}: {study.title}", f"layout {study.input.layout}, {study.calendar.kind} periods"]
    for name, path in found_files(study.input.files, study.folder):
        lines.append(f"read {name}  {path.stat().st_size:,} bytes")
    for key, origin in study.origin_of.items():
        if origin in ("option", "environment"):
            lines.append(f"set {key} by {origin}")
    if out is None:
        lines.append("write nothing but the result on stdout")
    else:
        check_free(out, force=call.force)
        lines.append(f"write {out}")
    return "\n".join([*lines, "nothing was done (--dry-run)"]) + "\n"
