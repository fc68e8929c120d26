"""The demo scenario, copied from the package (or, in a checkout, from beside it)."""

from __future__ import annotations

import shutil
from pathlib import Path

from cohortflow.errors import OutputError
from cohortflow.runs.place import whole_folder

STUDY_FILE = "veg_box.toml"
PACKAGE = Path(__file__).parents[1]
LEFT_OUT = shutil.ignore_patterns("__pycache__", "*.pyc", "__init__.py")


def demo_source() -> Path:
    """The folder of the demo: within the installed package, or at the top of a checkout.

    >>> (demo_source() / STUDY_FILE).exists()
    True
    """
    for folder in (PACKAGE / "demo_data", PACKAGE.parent / "demo_data"):
        if (folder / STUDY_FILE).is_file():
            return folder
    raise OutputError(f'The demo is not part of this installation: there is no "{PACKAGE / "demo_data"}".')


def write_demo(directory: str | Path, *, force: bool = False) -> Path:
    """Copy the demo into a new folder, whole or not at all; OutputError when there is something else already.

    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as home:
    ...     (write_demo(Path(home) / "veg") / STUDY_FILE).exists()
    True
    """
    target = Path(directory)
    with whole_folder(target, force=force, mark=STUDY_FILE) as part:
        shutil.copytree(demo_source(), part, dirs_exist_ok=True, ignore=LEFT_OUT)
    return target
