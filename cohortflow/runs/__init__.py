"""One forecast, one folder: made in steps, written whole, repeatable byte for byte.

folder.py  run(), the Run record   steps.py     the library calls of a study
write.py   the files               tables.py    the contract's tables;  findings.py
place.py   whole or not at all     versions.py  demo.py
comparison.py  compare(): two runs; bridge.py its split, drivers.py and course.py what it is made from,
outcome.py how forecasts did, opened.py a run read back from its folder
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from cohortflow.runs.comparison import Comparison as Comparison
    from cohortflow.runs.comparison import compare as compare
    from cohortflow.runs.demo import write_demo as write_demo
    from cohortflow.runs.folder import Run as Run
    from cohortflow.runs.folder import run as run

_HOME = {"compare": "comparison", "Comparison": "comparison", "run": "folder", "Run": "folder", "write_demo": "demo"}
__all__ = ["Comparison", "Run", "compare", "run", "write_demo"]


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module 'cohortflow.runs' has no attribute {name!r}")
    return getattr(importlib.import_module(f"cohortflow.runs.{_HOME[name]}"), name)
