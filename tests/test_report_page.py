"""The page as text: self-contained, escaped, deterministic. A browser looks at it in tests/browser."""

import re
from html.parser import HTMLParser
from pathlib import Path

import pytest

from cohortflow.errors import CallError
from cohortflow.report.page import fragment_html, inline, page_html, wide_charts
from cohortflow.report.sections import gather
from tests import report_fixtures as made

GOLD = Path(__file__).parent / "gold" / "report_small.html"
VOID = {"meta", "br", "link", "img", "input", "hr"}


class Outline(HTMLParser):
    """Headings, ids, links and whether every tag is closed."""

    def __init__(self, text):
        super().__init__()
        self.open, self.ids, self.links, self.headings, self.tags = [], [], [], [], []
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        at = dict(attrs)
        self.tags.append((tag, at))
        self.ids += [at["id"]] if "id" in at else []
        self.links += [at["href"]] if tag == "a" else []
        self.headings += [int(tag[1])] if re.fullmatch("h[1-6]", tag) else []
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.handle_starttag(tag, attrs)
        if tag not in VOID:
            self.open.pop()

    def handle_endtag(self, tag):
        assert self.open and self.open[-1] == tag, (tag, self.open[-3:])
        self.open.pop()


@pytest.fixture(scope="module")
def small():
    return page_html(gather(made.facts(made.SMALL), made.tables(made.SMALL)))


@pytest.fixture(scope="module")
def hostile():
    facts = made.facts(made.HOSTILE, title="</title><script>alert(1)</script>\u202eevil",
                       notes=("no_data:<img src=x>",), rules={"gone": "<b>bold</b>"},
                       inputs=(("<x>.csv", 1, 2, "ff"),), people={"prepared_by": "<i>"})  # fmt: skip
    return page_html(gather(facts, made.tables(made.HOSTILE)))


def test_nothing_is_fetched_and_nothing_runs(small):
    outline = Outline(small)
    assert not {"script", "link", "iframe", "img", "object", "embed"} & {tag for tag, _ in outline.tags}
    assert not re.search(r"url\((?!#)|@import|src=|https?://(?!www\.w3\.org/)", small)
    assert all(link.startswith("#") for link in outline.links)


def test_every_tag_is_closed_ids_are_unique_and_links_lead_somewhere(small, hostile):
    for text in (small, hostile):
        outline = Outline(text)
        assert outline.open == [] and len(set(outline.ids)) == len(outline.ids)
        assert {link[1:] for link in outline.links} <= set(outline.ids)


def test_headings_go_down_one_step_at_a_time(small):
    levels = Outline(small).headings
    assert levels[0] == 1 and levels.count(1) == 1
    assert all(b - a <= 1 for a, b in zip(levels, levels[1:], strict=False))


def test_landmarks_and_language(small):
    tags = Outline(small).tags
    assert ("html", {"lang": "en"}) in tags and {"header", "nav", "main", "footer"} <= {t for t, _ in tags}
    assert small.lstrip().startswith("<!DOCTYPE html>")


def test_every_chart_has_a_text_alternative_and_a_table(small):
    svgs = [at for tag, at in Outline(small).tags if tag == "svg"]
    assert len(svgs) >= 10 and all(at["role"] == "img" and len(at["aria-label"]) > 60 for at in svgs)
    assert "&lt;svg" not in small
    assert small.count("<table") >= 7 and small.count("<summary>") >= 6


def test_tables_have_captions_and_scopes(small):
    assert small.count("<caption>") == len(re.findall('<table(?: class="(?:short|signed)")?>', small))
    assert not re.search(r"<th(?! scope)[ >]", small)


def test_users_strings_are_text(hostile):
    assert (
        "<script" not in hostile
        and "<img" not in hostile
        and "<b>bold" not in hostile
        and "<i>" not in hostile
    )
    assert "\u202e" not in hostile
    assert "&lt;script&gt;alert(1)&lt;/script&gt;" in hostile and "&lt;b&gt;bold" in hostile


def test_dark_colours_are_for_screens_only(small):
    dark = small.index("prefers-color-scheme: dark")
    assert "@media screen and (prefers-color-scheme: dark)" in small[dark - 30 : dark + 40]
    assert "var(--ink)" in small and "#1b2a33" in small[: small.index("</style>")]
    assert "#1b2a33" not in small[small.index("</style>") :]


def test_findings_are_said_first_and_again_where_they_matter(small):
    first, _, rest = small.partition('id="counted"')
    assert "could not be used: 180 of 41,250" in first and "could not be used: 180 of 41,250" in rest


def test_the_same_content_gives_the_same_bytes(small):
    assert page_html(gather(made.facts(made.SMALL), made.tables(made.SMALL))) == small


def test_charts_drawn_before_are_used():
    content = gather(made.facts(made.SMALL), {"retention": made.retention()})
    drawn = wide_charts(content)
    assert page_html(content, drawn) == page_html(content) and list(drawn) == ["retention"]


def test_ids_of_a_chart_are_its_own():
    chart = wide_charts(gather(made.facts(made.SMALL), {"retention": made.retention()}))["retention"]
    ids = re.findall(r'\bid="([^"]+)"', inline(chart, "one"))
    used = re.findall(r'url\(#([^)]+)\)|href="#([^"]+)"', inline(chart, "one"))
    assert ids and all(i.startswith("one-") for i in ids)
    assert {a or b for a, b in used} <= set(ids)


def test_a_fragment_holds_one_section():
    content = gather(made.facts(made.SMALL), made.tables(made.SMALL))
    fragment = fragment_html(content, "counted")
    assert (
        fragment.count("<section") == 1 and "What became of the rows" in fragment and "<html" not in fragment
    )
    with pytest.raises(CallError, match='There is no section "count"'):
        fragment_html(content, "count")


def scrubbed(text):
    """The page without its drawings and without dates, which change with libraries and calendars."""
    text = re.sub(r"(<svg[^>]*>).*?</svg>", r"\1</svg>", text, flags=re.S)
    text = re.sub(r'viewBox="[^"]*"', "", text)
    return re.sub(r"\b20\d\d-\d\d(-\d\d)?\b", "DATE", text)


def test_gold(small):
    """To make it anew: delete the file, run once, read the difference."""
    if not GOLD.exists():
        GOLD.parent.mkdir(exist_ok=True)
        GOLD.write_text(scrubbed(small), encoding="utf-8", newline="\n")
        pytest.fail(f"{GOLD} was missing and has been written: read it, then run again")
    assert scrubbed(small) == GOLD.read_text(encoding="utf-8")
