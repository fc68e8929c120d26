"""`draft`: look at an extract and write a starter study beside it, for a person to confirm."""

from __future__ import annotations

import contextlib
import glob
import os
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from cohortflow.errors import InputError, OutputError, StudyError
from cohortflow.history.look import given_files, profile
from cohortflow.history.profile import Profile
from cohortflow.runs.draft_states import CONFIRM, possible_exits
from cohortflow.runs.draft_text import draft_text
from cohortflow.study.reading import study_from
from cohortflow.study.source import Source

STUDY_FILE = "study.toml"


@dataclass(frozen=True)
class Draft:
    """A starter study: its text, where it goes, and what it was drafted from.

    exits : names that may mean having left, set nowhere;  questions : lines that say CONFIRM
    """

    text: str
    path: Path
    profile: Profile
    exits: tuple[str, ...]

    @property
    def questions(self) -> int:
        """Lines that a person must read."""
        return sum(CONFIRM in line for line in self.text.splitlines()) - 1  # the head explains the word


def draft(
    files: Sequence[str | Path],
    *,
    out: str | Path = STUDY_FILE,
    force: bool = False,
    write: bool = True,
    encoding: str | None = None,
    delimiter: str | None = None,
    date_format: str | None = None,
    columns: Mapping[str, str] | None = None,
) -> Draft:
    """Profile the files of an extract and write a commented starter study, valid as it stands.

    States are the events or states of the extract; no exit is set, candidates are comments. `write=False` only makes
    the text. OutputError when `out` exists and `force` is not given; InputError when the extract cannot be read.

    >>> import tempfile
    >>> rows = ["member,month,state", *(f"m{i},2026-0{t},weekly" for i in range(40) for t in (1, 2, 3))]
    >>> with tempfile.TemporaryDirectory() as home:
    ...     panel = Path(home) / "panel.csv"
    ...     _ = panel.write_text("\\n".join(rows))
    ...     made = draft([panel], out=Path(home) / "panel.toml")
    >>> made.profile.layout, made.exits, 'name = "weekly"' in made.text
    ('history', (), True)
    """
    target = Path(out)
    _check_free(target, force)
    found = profile(files, encoding=encoding, delimiter=delimiter, date_format=date_format, columns=columns)
    paths = [path for _, path in given_files(files)]
    text = draft_text(found, files=[_named(p, target) for p in paths], title=_title(paths))
    _check_valid(text, target)
    if write:
        _write(target, text)
    return Draft(text, target, found, possible_exits(found))


def _named(path: Path, target: Path) -> str:
    """A file as the study names it: from the study's folder, signs of globs taken literally."""
    try:
        relative = os.path.relpath(path.absolute(), target.absolute().parent)
    except ValueError:  # another drive
        relative = str(path.absolute())
    return glob.escape(Path(relative).as_posix())


def _title(paths: Sequence[Path]) -> str:
    stem = os.path.commonprefix([p.name.split(".")[0] for p in paths])
    stem = (stem.rstrip("0123456789") if len(paths) > 1 else stem).strip("-_ ")
    return stem or paths[0].name


def _check_valid(text: str, target: Path) -> None:
    """InputError when names of the extract cannot stand in a study (a state called "all_live")."""
    try:
        study_from(tomllib.loads(text), Source(target.name, text), target)
    except StudyError as error:
        raise InputError(
            f"No study can be drafted from this extract as it is: {error} Write the study file by hand."
        ) from None


def _check_free(target: Path, force: bool) -> None:
    if target.is_dir():
        raise OutputError(f'"{target}" is a folder; --out needs the name of a study file, like {STUDY_FILE}.')
    if target.exists() and not force:
        raise OutputError(f'"{target}" exists already; choose another name, or add --force to replace it.')


def _write(target: Path, text: str) -> None:
    part = target.with_name(f".{target.name}.part")
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        part.write_bytes(text.encode("utf-8"))
        part.replace(target)
    except OSError as error:
        raise OutputError(f'"{target}" cannot be written: {error.strerror or error}.') from None
    finally:
        with contextlib.suppress(OSError):
            part.unlink(missing_ok=True)
