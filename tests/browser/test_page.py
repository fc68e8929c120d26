"""The report page in a real browser: 1280 and 390 pixels, light and dark, and in print."""

from importlib.resources import files

import pytest

from cohortflow.report.page import page_html
from cohortflow.report.sections import gather
from tests import report_fixtures as made

pytestmark = pytest.mark.browser

BROKEN = """() => [...document.querySelectorAll('svg')].filter(s => s.checkVisibility()).map(s => {
    const box = s.getBoundingClientRect();
    const out = [...s.querySelectorAll('text')].filter(t => {
        const b = t.getBoundingClientRect();
        const aside = b.left < box.left - 2 || b.right > box.right + 2;
        return b.width && (aside || b.top < box.top - 2 || b.bottom > box.bottom + 2);
    }).map(t => t.textContent);
    return [box.width > 100 && box.height > 50, out];
})"""
COVERED = """() => [...document.querySelectorAll('svg')].filter(s => s.checkVisibility()).flatMap(s => {
    const boxes = [...s.querySelectorAll('text')].map(t => [t.textContent, t.getBoundingClientRect()]);
    const found = [];
    boxes.forEach(([a, p], i) => boxes.slice(i + 1).forEach(([b, q]) => {
        const across = Math.min(p.right, q.right) - Math.max(p.left, q.left);
        const down = Math.min(p.bottom, q.bottom) - Math.max(p.top, q.top);
        if (across > 2 && down > 0.45 * Math.min(p.height, q.height)) found.push([a, b]);
    }));
    return found;
})"""


def content(states, **changes):
    return gather(made.facts(states, **changes), made.tables(states), approach=made.approach(states))


@pytest.fixture(scope="module")
def pages(tmp_path_factory):
    folder = tmp_path_factory.mktemp("pages")
    title = "</title><script>document.title = 'caught'</script>"
    made_pages = {
        "veg box": page_html(content(made.VEG_BOX)),
        "hostile": page_html(
            content(made.HOSTILE, title=title, notes=("no_data:<img src=x onerror=alert(1)>",))
        ),
        "fifteen": page_html(content(made.FIFTEEN)),
    }
    for name, text in made_pages.items():
        (folder / f"{name}.html").write_text(text, encoding="utf-8")
    return {name: (folder / f"{name}.html").as_uri() for name in made_pages}


@pytest.fixture
def opened(browser, pages, request):
    """A page opened at a size and colour scheme; what it said on the console, what it asked the network for."""
    name, width, scheme = request.param
    context = browser.new_context(viewport={"width": width, "height": 900}, color_scheme=scheme)
    page = context.new_page()
    page.said, page.asked, page.scheme = [], [], scheme
    page.on("console", lambda message: page.said.append(message.text))
    page.on("pageerror", lambda error: page.said.append(str(error)))
    page.on("request", lambda asked: page.asked.append(asked.url))
    page.goto(pages[name])
    yield page
    context.close()


EVERY = [(n, w, s) for n in ("veg box", "hostile", "fifteen") for w in (1280, 390) for s in ("light", "dark")]
every_page = pytest.mark.parametrize("opened", EVERY, indirect=True, ids=lambda p: "-".join(map(str, p)))
hostile = pytest.mark.parametrize("opened", [("hostile", 1280, "light")], indirect=True)
veg_box = pytest.mark.parametrize("opened", [("veg box", 1280, "dark")], indirect=True)


@every_page
def test_quiet_whole_and_accessible(opened):
    assert opened.said == [] and len(opened.asked) == 1
    assert opened.evaluate("document.documentElement.scrollWidth <= document.documentElement.clientWidth")
    assert opened.evaluate("[...document.images].every(i => i.naturalWidth > 0)")
    shown = opened.evaluate(BROKEN)
    assert len(shown) >= 7 and all(big for big, _ in shown)
    assert [out for _, out in shown if out] == []
    assert opened.scheme == "dark" or opened.evaluate(COVERED) == []  # the same shapes in both schemes
    assert violations(opened) == []


def violations(page):
    """axe-core's findings with all details opened, as (rule, impact, first element)."""
    page.evaluate("document.querySelectorAll('details').forEach(d => { d.open = true; })")
    page.evaluate(files("axe_playwright_python").joinpath("axe.min.js").read_text(encoding="utf-8"))
    found = page.evaluate("axe.run(document, {resultTypes: ['violations']})")["violations"]
    return [(v["id"], v["impact"], v["nodes"][0]["html"][:200]) for v in found]


@hostile
def test_hostile_names_are_text(opened):
    assert opened.evaluate("document.querySelectorAll('script, img').length") == 0
    assert opened.title() == "</title><script>document.title = 'caught'</script>"
    text = opened.evaluate("document.body.textContent")
    for name in made.HOSTILE.names:
        assert name[:20] in text, name
    assert "<img src=x onerror=alert(1)>" in text


@veg_box
def test_keyboard_reaches_everything(opened):
    opened.keyboard.press("Tab")
    assert opened.evaluate("document.activeElement.textContent") == "Skip to the report"
    seen = set()
    for _ in range(80):
        opened.keyboard.press("Tab")
        seen.add(opened.evaluate("document.activeElement.tagName + (document.activeElement.className || '')"))
    assert {"A", "SUMMARY", "DIVscroll"} <= seen
    opened.locator("summary").first.focus()
    opened.keyboard.press("Enter")
    assert opened.evaluate("document.querySelector('details').open")


@veg_box
def test_narrow_drawings_are_for_narrow_screens(opened):
    visible = "sel => [...document.querySelectorAll(sel)].every(d => d.checkVisibility())"
    hidden = "sel => ![...document.querySelectorAll(sel)].some(d => d.checkVisibility())"
    assert opened.evaluate(visible, ".wide-only") and opened.evaluate(hidden, ".narrow-only")
    opened.set_viewport_size({"width": 390, "height": 800})
    assert opened.evaluate(hidden, ".wide-only") and opened.evaluate(visible, ".narrow-only")


@veg_box
def test_dark_and_print_colours(opened):
    colour = "getComputedStyle(document.querySelector('.cf')).backgroundColor"
    assert opened.evaluate(colour) == "rgb(18, 25, 30)"
    opened.emulate_media(media="print")
    assert opened.evaluate(colour) == "rgb(253, 253, 252)"


@veg_box
def test_print_shows_the_tables_and_fits_the_paper(opened):
    opened.emulate_media(media="print")
    opened.set_viewport_size({"width": 690, "height": 1000})  # A4 less the margins, at 96 dpi
    assert opened.evaluate("document.documentElement.scrollWidth <= document.documentElement.clientWidth")
    assert opened.evaluate(
        "[...document.querySelectorAll('details table')].every(t => t.getBoundingClientRect().height > 20)"
    )
    wide = opened.evaluate(
        "[...document.querySelectorAll('table, svg')].filter(t => t.checkVisibility() && "
        "t.getBoundingClientRect().right > 700).map(t => t.textContent.slice(0, 40))"
    )
    assert wide == []
    printed = opened.pdf(format="A4", prefer_css_page_size=True)
    assert (
        printed.startswith(b"%PDF")
        and 5
        <= printed.count(b"/Type /Page\n") + printed.count(b"/Type /Page ") + printed.count(b"/Type /Page/")
        <= 20
    )


def test_it_reads_without_script(browser, pages):
    context = browser.new_context(java_script_enabled=False)
    page = context.new_page()
    page.goto(pages["veg box"])
    assert "Where it settles" in page.inner_text("main") and page.locator("svg").count() >= 14
    context.close()
