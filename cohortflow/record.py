"""The manners that every result shares: `.to_frame()`, `.to_dict()`, a short repr, a safe HTML display."""

from __future__ import annotations

import html
from collections.abc import Mapping
from types import MappingProxyType
from typing import Any, ClassVar

import numpy as np
import pandas as pd

ROWS_SHOWN = 12


class Record:
    """Base of the frozen records. A subclass is a frozen dataclass (repr=False, eq=False) and defines `kind`,
    `to_frame()` (tidy, full precision) and `headline()` (one line with units and n).

    Records cannot be iterated or unpacked, so that fields can be added later without breaking callers.
    """

    kind: ClassVar[str] = "record"
    format_version: ClassVar[int] = 1
    __iter__ = None  # a record is not a tuple

    def to_frame(self) -> pd.DataFrame:
        """The result as a tidy table: one row a figure, full precision, codes rather than words."""
        raise NotImplementedError

    def headline(self) -> str:
        """One line: what this is, its units and its size."""
        return self.kind

    def about(self) -> Mapping[str, Any]:
        """Settings that the table alone does not tell (level, method, window ...)."""
        return {}

    def to_dict(self) -> dict[str, Any]:
        """A JSON-ready dictionary with kind, format version, settings and the rows of `to_frame()`.

        NaN and missing values become None, infinities the strings "inf" and "-inf".
        """
        rows = self.to_frame().to_dict(orient="records")
        return {
            "kind": self.kind,
            "format_version": self.format_version,
            "about": plain(dict(self.about())),
            "rows": plain(rows),
        }

    def __repr__(self) -> str:
        return f"<{self.headline()}>"

    def _repr_html_(self) -> str:
        frame = self.to_frame()
        table = frame.head(ROWS_SHOWN).to_html(index=False, escape=True, border=0)
        more = f"<p>{len(frame) - ROWS_SHOWN} more rows</p>" if len(frame) > ROWS_SHOWN else ""
        return f"<div><p><b>{html.escape(self.headline())}</b></p>{table}{more}</div>"


def frozen_array(values: Any, dtype: Any = float) -> np.ndarray:
    """A read-only copy, so that a record cannot be changed behind its back."""
    array = np.array(values, dtype=dtype)
    array.setflags(write=False)
    return array


def frozen_mapping(values: Mapping[Any, Any]) -> Mapping[Any, Any]:
    """A read-only view of a copy."""
    return MappingProxyType(dict(values))


def plain(value: Any) -> Any:
    """`value` with only dict, list, str, int, float, bool and None inside: ready for JSON."""
    if isinstance(value, Mapping):
        return {str(k): plain(v) for k, v in value.items()}
    if isinstance(value, (list, tuple, set, frozenset, np.ndarray, pd.Series)):
        return [plain(v) for v in value]
    if isinstance(value, (bool, np.bool_)):
        return bool(value)
    if isinstance(value, (int, np.integer)):
        return int(value)
    if isinstance(value, (float, np.floating)):
        number = float(value)
        if np.isnan(number):
            return None
        return number if np.isfinite(number) else ("inf" if number > 0 else "-inf")
    if value is None or value is pd.NA or value is pd.NaT:
        return None
    return value if isinstance(value, str) else str(value)
