"""The page of a comparison: self-contained, safe, the same bytes."""

import re
from pathlib import Path

import pytest

import cohortflow as cf
from cohortflow.report.of_comparison import comparison_files
from tests.comparison_cases import STUDY, folder

PATHS = {"hhg": 6, "hhhhh": 9, "hahhh@north": 4, "1.hhgh": 3, "2.hhh@north": 2, "haahg": 2, "3.hh": 2}
HOSTILE = STUDY.replace('title = "small"', 'title = "<script>alert(1)</script> & co"')


@pytest.fixture(scope="module")
def files(tmp_path_factory: pytest.TempPathFactory) -> dict[str, str]:
    home: Path = tmp_path_factory.mktemp("page")
    runs = [folder(home, name, PATHS, last=last, text=HOSTILE) for name, last in (("q2", 3), ("q3", 4))]
    made = cf.compare(*runs)
    found = dict(comparison_files(made))
    assert comparison_files(made) == found
    return found


def test_the_page_is_self_contained_and_complete(files):
    page = files["comparison.html"]
    assert "<script" not in page and "&lt;script&gt;" in page
    assert not re.findall(r'(?:src|href)="(?!#)', page)
    for title in (
        "Why the forecast changed",
        "How the last forecasts did",
        "How the change is split",
        "Shapley",
    ):
        assert title in page
    assert page.count("<svg") == 4  # two charts, wide and narrow


def test_ids_are_unique_and_charts_have_words(files):
    page = files["comparison.html"]
    ids = re.findall(r'\bid="([^"]+)"', page)
    assert len(ids) == len(set(ids))
    assert page.count('role="img" aria-label="') == 4
    assert set(files) == {"comparison.html", "charts/bridge_all_live.svg", "charts/actual.svg"}


def test_one_run_against_itself_has_nothing_to_catch_up_with(tmp_path):
    run = folder(tmp_path, "q2", PATHS, last=3)
    page = comparison_files(cf.compare(run, run))
    assert set(page) == {"comparison.html", "charts/bridge_all_live.svg"}
    assert "How the last forecasts did" not in page["comparison.html"]
