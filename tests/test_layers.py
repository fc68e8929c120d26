"""Imports point one way: each part uses only what stands to its left."""

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "cohortflow"
RANK = {
    "errors": 0, "markov": 1, "record": 2, "states": 2, "periods": 2,
    "study": 3, "chain": 3, "tally": 3, "tally_cuts": 3,
    "history": 4, "estimator": 4, "projector": 4,
    "whatif": 5, "assessment": 5, "report": 6, "runs": 7, "cli": 8,
}
SIBLINGS_THAT_MAY = {"record", "states", "periods", "study", "chain", "tally", "tally_cuts"}
ONLY_IN = {
    "matplotlib": {"report"}, "jinja2": {"report"}, "openpyxl": {"report"}, "click": {"cli"},
    "duckdb": {"history"}, "pyspark": {"history"},
}  # fmt: skip
MODULES = sorted(p for p in PACKAGE.rglob("*.py") if p.parent != PACKAGE or p.stem != "__init__")


def part_of(path: Path) -> str:
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


def imported(path: Path) -> set[str]:
    names = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: write imports in full"
            names |= {f"{node.module}.{alias.name}" for alias in node.names}
    return names


def breaches(path: Path) -> list[str]:
    here, found = part_of(path), []
    for name in imported(path):
        top, _, rest = name.partition(".")
        if here not in ONLY_IN.get(top, {here}):
            found.append(f"{here} imports {top}")
        part = rest.split(".")[0]
        if top != "cohortflow" or part in (here, "__version__", ""):
            continue
        siblings = RANK[part] == RANK[here] and {part, here} <= SIBLINGS_THAT_MAY
        if RANK[part] >= RANK[here] and not siblings:
            found.append(f"{here} imports {part}")
    return found


@pytest.mark.parametrize("path", MODULES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_imports_point_one_way(path):
    assert breaches(path) == []


def test_the_check_itself_sees_a_breach(tmp_path, monkeypatch):
    bad = tmp_path / "markov" / "bad.py"
    bad.parent.mkdir()
    bad.write_text("import duckdb\nfrom cohortflow.report import page\n")
    monkeypatch.setitem(globals(), "PACKAGE", tmp_path)
    assert sorted(breaches(bad)) == ["markov imports duckdb", "markov imports report"]
