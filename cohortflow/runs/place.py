"""Writing a folder so that it is there whole or not at all, and by one run at a time.

Everything is written into a hidden folder beside the target and moved into place at the end, in one step where
the system can (Linux). A lock file beside it, held by the operating system, goes when its process goes, however
that ends; what a killed run left behind is cleared away, and an older folder it was about to replace put back,
by the next run into that place.
"""

from __future__ import annotations

import ctypes
import os
import shutil
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

from cohortflow.errors import OutputError

MARK = "run.json"
HERE, EXCHANGE = -100, 2  # AT_FDCWD and RENAME_EXCHANGE of Linux


def check_free(target: Path, *, force: bool, mark: str = MARK) -> None:
    """OutputError unless `target` may be written: not there, empty, or, with `force`, an earlier one.

    Only a folder that holds `mark` is ever replaced, so that a slip of the keyboard costs no other work.
    """
    if not target.exists() and not target.is_symlink():
        return
    if not target.is_dir():
        raise OutputError(f'"{target}" is a file; --out needs the name of a folder.')
    if not any(target.iterdir()):
        return
    if not force:
        raise OutputError(f'"{target}" exists already; choose another name, or add --force to replace it.')
    if not (target / mark).is_file():
        raise OutputError(
            f'"{target}" was not written by this program (it has no {mark}), so --force does not replace it; '
            "choose another name."
        )


@contextmanager
def whole_folder(target: Path, *, force: bool = False, mark: str = MARK) -> Iterator[Path]:
    """An empty folder to write into, moved to `target` when the block ends well, removed when it does not.

    OutputError when the target may not be replaced, another run writes there now, or the disk refuses.

    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as home:
    ...     with whole_folder(Path(home) / "out") as part:
    ...         _ = (part / "run.json").write_text("{}")
    ...     [p.name for p in Path(home).rglob("*")]
    ['out', 'run.json']
    """
    target = Path(target).absolute()
    with _disk(target), _lock(target):
        _recover(target)
        check_free(target, force=force, mark=mark)
        part = _hidden(target, "part")
        part.mkdir()
        try:
            yield part
            _into_place(part, target)
        finally:
            shutil.rmtree(part, ignore_errors=True)


def write_text(path: Path, text: str) -> None:
    """Text as UTF-8 with "\\n" line ends, the same bytes on every system."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(text.encode("utf-8"))


def _hidden(target: Path, what: str) -> Path:
    return target.with_name(f".{target.name}.{what}")


@contextmanager
def _disk(target: Path) -> Iterator[None]:
    """What the file system refuses becomes an OutputError."""
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        yield
    except OSError as error:
        raise OutputError(f'"{target}" cannot be written: {error.strerror or error}.') from error


def _recover(target: Path) -> None:
    """Clear away what a killed run left; put the earlier folder back if it was killed between two renames."""
    old = _hidden(target, "old")
    if old.exists() and not target.exists():
        old.rename(target)
    for left in (_hidden(target, "part"), old):
        shutil.rmtree(left, ignore_errors=True)


def _into_place(part: Path, target: Path) -> None:
    """One step where the system can exchange two folders; else two renames, which `_recover` can complete."""
    if target.exists() and _exchanged(part, target):
        return  # the earlier folder is now `part`, and is removed as such
    old = _hidden(target, "old")
    if target.exists():
        target.rename(old)
    part.rename(target)
    shutil.rmtree(old, ignore_errors=True)


def _exchanged(part: Path, target: Path) -> bool:
    """Whether the two folders have changed places at once; False where the system has no such call."""
    call = getattr(ctypes.CDLL(None), "renameat2", None) if sys.platform.startswith("linux") else None
    if call is None:
        return False
    return call(HERE, os.fsencode(part), HERE, os.fsencode(target), EXCHANGE) == 0


@contextmanager
def _lock(target: Path) -> Iterator[None]:
    path = _hidden(target, "lock")
    while True:
        handle = os.open(path, os.O_CREAT | os.O_RDWR)
        if not _locker()(handle):
            os.close(handle)
            raise OutputError(f'another run is writing "{target}" now; wait for it, or choose another name.')
        if path.exists() and os.fstat(handle).st_ino == path.stat().st_ino:
            break
        os.close(handle)  # the run that held it has just finished and removed the file
    try:
        yield
    finally:
        path.unlink(missing_ok=True)
        os.close(handle)


def _locker() -> Callable[[int], bool]:
    """How this system locks an open file: True when it is ours, False when another process has it."""
    try:
        import fcntl
    except ImportError:  # Windows
        import msvcrt

        def windows(handle: int) -> bool:
            try:
                msvcrt.locking(handle, msvcrt.LK_NBLCK, 1)  # type: ignore[attr-defined,unused-ignore]
            except OSError:
                return False
            return True

        return windows

    def posix(handle: int) -> bool:
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            return False
        return True

    return posix
