"""Where rows come from: files (CSV, gzip, TSV, Parquet, globs) and frames, seen as columns c0, c1, ... of the engine.

Names of columns in the extract never reach a statement except as quoted identifiers of Parquet and frames.
"""

from __future__ import annotations

import glob
import hashlib
import os
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pandas as pd

from cohortflow.errors import CallError, InputError, listed, nearest
from cohortflow.history.dialect import Dialect, detect, transcoded
from cohortflow.history.engine import Engine, quoted

SUFFIXES = (".csv", ".csv.gz", ".tsv", ".tsv.gz", ".txt", ".txt.gz", ".parquet")
SAMPLED = 2000


@dataclass
class Source:
    """One file or frame.

    columns : its header;  types : the engine's type of each;  relation : SQL giving c0, c1, ...
    first, rows : its rows in the table `rows`;  cells : rows a record (more than one in the layout wide)
    """

    name: str
    columns: tuple[str, ...]
    types: tuple[str, ...]
    relation: str
    samples: Mapping[str, Sequence[str]]
    path: Path | None = None
    dialect: Dialect | None = None
    text_path: Path | None = None
    size: int = 0
    sha256: str = ""
    first: int = 0
    rows: int = 0
    cells: int = 1
    bad: list[tuple[int, str]] = field(default_factory=list)

    @property
    def shown(self) -> str:
        """Dialect or kind, for the accounting."""
        if self.dialect:
            return self.dialect.shown()
        return "parquet" if self.path else "frame"

    def column(self, wanted: str, key: str) -> int:
        """Place of a column; InputError with the columns there are and the nearest name."""
        if wanted in self.columns:
            return self.columns.index(wanted)
        folded = [c.strip().casefold() for c in self.columns]
        if folded.count(wanted.strip().casefold()) == 1:
            return folded.index(wanted.strip().casefold())
        raise InputError(
            f'{self.name}: there is no column "{wanted}" (for {key}){nearest(wanted, self.columns)}. '
            f"The columns are {listed(self.columns)}. Name the column in [input], and see that the first "
            "line holds the column names."
        )


def is_frame(data: Any) -> bool:
    """Whether `data` is a table in memory rather than a path."""
    return hasattr(data, "__arrow_c_stream__") or isinstance(data, pd.DataFrame)


def held(data: Any) -> Any:
    """A stream that can be read only once, as a table; anything else as it is."""
    return data.read_all() if hasattr(data, "read_all") and hasattr(data, "__arrow_c_stream__") else data


def found_files(files: Iterable[str | Path], folder: Path) -> list[tuple[str, Path]]:
    """(name to show, path) of every file that the names and globs give, each once, in order of name."""
    out: dict[Path, str] = {}
    for wanted in files:
        pattern = str(folder / wanted)
        paths = _matches(pattern)
        if not paths:
            near = _beside(pattern)
            raise InputError(
                f'No file matches "{wanted}" in {folder.resolve()}{nearest(Path(wanted).name, near)}. '
                "Names in [input] files start from the folder of the study file."
            )
        for path in paths:
            if not path.name.lower().endswith(SUFFIXES):
                raise InputError(
                    f"{path.name}: files of this kind are not read. Allowed: {listed(SUFFIXES)}; save the "
                    "extract as CSV or Parquet."
                )
            out.setdefault(path.resolve(), _shown_name(path, folder))
    return [(name, path) for path, name in out.items()]


def _matches(pattern: str) -> list[Path]:
    """Files of a name or glob; a name that no file can have (too long, a zero byte) matches none."""
    try:
        hits = sorted(glob.glob(pattern, recursive=True)) if glob.has_magic(pattern) else [pattern]
        return [Path(hit) for hit in hits if os.path.isfile(hit)]
    except (OSError, ValueError):
        return []


def _beside(pattern: str) -> list[str]:
    """Names of files where the pattern looks, for the hint."""
    try:
        return sorted(p.name for p in Path(pattern).parent.glob("*") if p.is_file())[:200]
    except (OSError, ValueError):
        return []


def _shown_name(path: Path, folder: Path) -> str:
    try:
        return path.relative_to(folder).as_posix()
    except ValueError:
        return path.name


def file_source(
    engine: Engine,
    name: str,
    path: Path,
    number: int,
    *,
    encoding: str | None = None,
    delimiter: str | None = None,
    fingerprint: bool = True,
) -> Source:
    """A file as the engine will read it."""
    size = path.stat().st_size
    sha = _sha256(path) if fingerprint else ""
    if path.name.lower().endswith(".parquet"):
        source = _relation_source(engine, name, f"read_parquet({quoted(str(path))})")
        source.path, source.size, source.sha256 = path, size, sha
        return source
    dialect = detect(path, encoding=encoding, delimiter=delimiter)
    text_path = path if dialect.as_is else transcoded(path, dialect, engine.folder, number)
    samples = {c: [r[i] for r in dialect.sample if i < len(r)] for i, c in enumerate(dialect.header)}
    return Source(
        name=name,
        columns=dialect.header,
        types=("VARCHAR",) * len(dialect.header),
        relation=_csv_sql(text_path, dialect, number),
        samples=samples,
        path=path,
        dialect=dialect,
        text_path=text_path,
        size=size,
        sha256=sha,
    )


def frame_source(engine: Engine, data: Any, name: str = "frame") -> Source:
    """A pandas DataFrame or anything with `__arrow_c_stream__`."""
    if isinstance(data, pd.DataFrame):
        repeated = sorted({str(c) for c in data.columns if list(data.columns).count(c) > 1})
        if repeated:
            raise InputError(f"The frame has the columns {listed(repeated)} more than once; rename them.")
        data = _plain_frame(data)
    elif not hasattr(data, "__arrow_c_stream__"):
        raise CallError(
            f"Data must be a path, a DataFrame or an object with __arrow_c_stream__; got {type(data).__name__}."
        )
    engine.register("given_frame", held(data))
    return _relation_source(engine, name, "given_frame")


def _plain_frame(data: pd.DataFrame) -> pd.DataFrame:
    """Columns of one plain type each: mixed objects, categories and extension types become text."""
    out = {}
    for place, name in enumerate(data.columns):
        column = data.iloc[:, place]
        kind = column.dtype.kind if hasattr(column.dtype, "kind") else "O"
        if isinstance(column.dtype, pd.PeriodDtype | pd.CategoricalDtype) or kind == "O":
            known = column.notna().to_numpy()
            values = pd.Series([None] * len(column), dtype=object)
            values[known] = [str(v) for v in column[known]]
            out[str(name)] = values.to_numpy()
        else:
            out[str(name)] = column.array
    return pd.DataFrame(out, index=pd.RangeIndex(len(data)))


def _relation_source(engine: Engine, name: str, relation: str) -> Source:
    try:
        described = engine.rows(f"DESCRIBE SELECT * FROM {relation}")
    except Exception as error:
        raise InputError(f"{name}: cannot read the table: {_first_line(error)}") from None
    columns, types = tuple(str(r[0]) for r in described), tuple(str(r[1]) for r in described)
    inner = ", ".join(f"{identifier(c)} AS c{i}" for i, c in enumerate(columns))
    sql = f"(SELECT {inner} FROM {relation})"
    texts = [(i, c) for i, (c, t) in enumerate(zip(columns, types, strict=True)) if t == "VARCHAR"]
    samples: dict[str, Sequence[str]] = {}
    if texts:
        head = engine.rows(f"SELECT {', '.join(f'c{i}' for i, _ in texts)} FROM {sql} LIMIT {SAMPLED}")
        samples = {c: [r[k] for r in head if r[k] is not None] for k, (_, c) in enumerate(texts)}
    return Source(name=name, columns=columns, types=types, relation=sql, samples=samples)


def _csv_sql(path: Path, dialect: Dialect, number: int) -> str:
    columns = ", ".join(f"'c{i}': 'VARCHAR'" for i in range(len(dialect.header)))
    packed = ", compression='gzip'" if dialect.packed and dialect.as_is else ""
    packed += f", skip={dialect.blank_lines}" if dialect.blank_lines else ""
    return (
        f"read_csv({quoted(str(path))}, auto_detect=false, header=true, delim={quoted(dialect.delimiter)}, "
        f"""quote='"', escape='"', columns={{{columns}}}, store_rejects=true, """
        f"rejects_table='bad_{number}', rejects_scan='scan_{number}', rejects_limit=0{packed})"
    )


def identifier(name: str) -> str:
    """A quoted SQL identifier.

    >>> identifier('a"; drop table x; --')
    '"a""; drop table x; --"'
    """
    return '"' + name.replace('"', '""') + '"'


def _sha256(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def _first_line(error: Exception) -> str:
    return str(error).splitlines()[0] if str(error) else type(error).__name__
