"""The what-if panel in a real browser: its numbers against the library, its controls, its manners."""

import numpy as np
import pytest

from cohortflow.chain import Chain, Component, Schedule
from cohortflow.report.panel import panel
from cohortflow.states import States
from cohortflow.whatif import Change, Scenario, what_if
from tests.projector_cases import SEPTEMBER
from tests.whatif_cases import MONEY, models

pytestmark = pytest.mark.browser

HEAD = '<!DOCTYPE html><html lang="en"><head><meta charset="utf-8"><title>panel</title></head>'
PAGE = HEAD + "<body><main>{}</main></body></html>"
FIGURES = """([adds, factor, start]) =>
    document.querySelector('.cf-panel').cfFiguresOf(adds, factor, start)"""


@pytest.fixture
def show(browser, tmp_path):
    """Opens a panel; the page carries what it said on the console and asked of the network."""
    contexts = []

    def opened(shown, **context):
        folder = tmp_path / "panel.html"
        folder.write_text(PAGE.format(shown.html), encoding="utf-8")
        contexts.append(browser.new_context(**context))
        page = contexts[-1].new_page()
        page.said, page.asked = [], []
        page.on("console", lambda message: page.said.append(message.text))
        page.on("pageerror", lambda error: page.said.append(str(error)))
        page.on("request", lambda request: page.asked.append(request.url))
        page.goto(folder.as_uri())
        return page

    yield opened
    for context in contexts:
        context.close()


def veg():
    """Twelve states, two exits, dense rows."""
    rng = np.random.default_rng(5)
    names = [f"s{k:02d}" for k in range(10)] + ["left", "lapsed"]
    P = rng.dirichlet(np.ones(12), 12)
    P[10:] = np.eye(12)[10:]
    states = States(names, exits=names[10:], away=["s03"])
    return Chain(states, P), {n: 100.0 for n in names[:10]}, {"s00": 40.0, "s01": 10.0}


def memory():
    """Two states with memory of the one before, in which one row never made a move that the others make."""
    rows = [
        [
            [0.7, 0, 0.2, 0, 0.1],
            [0.9, 0, 0, 0, 0.1],
            [0, 0.3, 0, 0.6, 0.1],
            [0, 0.3, 0, 0.6, 0.1],
            [0, 0, 0, 0, 1],
        ]
    ]
    states = States(["a", "b", "out"], exits=["out"])
    law = np.array([[0.5, 0.5, 0, 0, 0], [0, 0, 0.5, 0.5, 0], [0, 0, 0, 0, 1]])
    return Schedule(states, (Component(rows, [0, 0, 1, 1, 2], law, law),))


def cases():
    out = [
        (name, s, [(live, gone), (live, live)], start, joiners)
        for name, s, live, gone, start, joiners in models()
    ]
    chain, start, joiners = veg()
    out.append(
        ("twelve", chain, [("s00", "s05"), ("s00", "left"), ("s04", "s04"), ("s03", "s01")], start, joiners)
    )
    out.append(("memory", memory(), [("a", "b"), ("b", "out")], {"a": 60.0, "b": 40.0}, {"a": 5.0}))
    return out


@pytest.mark.parametrize("case", cases(), ids=lambda case: case[0])
def test_numbers_equal_the_librarys(show, case):
    name, model, moves, start, joiners = case
    states = model.states
    money = {"per_period": {moves[0][0]: 20.0}, "discount_rate": 0.1, "timing": "middle"}
    given = {"periods": 9, "start": start, "joiners": joiners, "value": money, "base_period": SEPTEMBER}
    page = show(panel(model, moves=moves, **given))
    rng = np.random.default_rng(3)
    for trial in range(6):
        low = 0.001 if name == "memory" else -0.02  # a row of the model never made its move
        adds = [round(float(rng.uniform(low, 0.03)), 4) if trial else 0.0 for _ in moves]
        factor, begins = (
            (1.0, 0) if trial == 0 else (float(rng.integers(50, 160)) / 100, int(rng.integers(0, 5)))
        )
        changes = [Change(a, b, add=d) for (a, b), d in zip(moves, adds, strict=True) if d]
        plan = Scenario("x", changes, joiners_multiply=factor, starts=SEPTEMBER + 1 + begins)
        expected = what_if(model, plan, **given)
        found = page.evaluate(FIGURES, [adds, factor, begins])
        assert found["met"] is True
        assert found["live"][1:] == pytest.approx(
            expected.by_period["all_live"].changed.tolist(), rel=1e-9
        ), name
        for k, gone in enumerate(states.exits):
            assert found["lost"][k] == pytest.approx(expected.by_period[gone].changed[-1], rel=1e-9)
        assert found["value"] == pytest.approx(expected.total["value"].changed, rel=1e-9)
        assert found["settled"] == pytest.approx(expected.settled["all_live"].changed, rel=1e-9)
        for h in range(9):
            row = [expected.by_period[n].changed[h] for n in states.names]
            assert found["counts"][h + 1] == pytest.approx(row, rel=1e-9, abs=1e-9)
    assert page.said == [] and len(page.asked) == 1  # the page itself


def opened_veg(show, **context):
    chain, start, joiners = veg()
    shown = panel(chain, moves=[("s00", "s05"), ("s04", "left")], periods=12, start=start, joiners=joiners,
                  value={"per_period": {"s00": 5.0, "s05": 9.0}, "currency": "GBP"}, base_period="2026-09")  # fmt: skip
    return show(shown, **context)


def texts(page, key):
    return [page.locator(f'[data-{side}="{key}"]').inner_text() for side in ("now", "then", "gain")]


def test_the_keyboard_moves_sliders_and_everything_follows(show):
    page = opened_veg(show)
    slider = page.get_by_label("s04 to left")
    before = page.locator(".cf-then").get_attribute("d")
    assert texts(page, "live")[2] == "0"
    slider.focus()
    for _ in range(20):
        page.keyboard.press("ArrowLeft")
    assert slider.get_attribute("aria-valuetext").startswith("-2.00 points, now ")
    assert page.locator('output[data-move="1"]').inner_text() == "-2.00 points"
    now, then, gained = texts(page, "live")
    assert gained.startswith("+") and int(then.replace(",", "")) > int(now.replace(",", ""))
    assert page.locator(".cf-then").get_attribute("d") != before
    assert page.locator(".cf-now").get_attribute("d") is not None
    said = page.locator("[data-words]").inner_text()
    assert said == page.locator("svg").get_attribute("aria-label") and f"{then}, {gained} against" in said
    rows = page.locator('[data-row="12"] td').all_text_contents()
    assert rows == [now, then]


def test_joiners_start_and_reset(show):
    page = opened_veg(show)
    page.get_by_label("Joiners, of those expected").fill("150")
    late = page.get_by_label("From which period on")
    first = texts(page, "live")
    late.select_option("6")
    assert texts(page, "live")[1] != first[1] and texts(page, "settled")[2].startswith("+")
    page.get_by_role("button", name="Set everything back").click()
    page.wait_for_function("document.querySelector('[data-gain=live]').textContent === '0'")
    assert (
        page.get_by_label("Joiners, of those expected").input_value() == "100" and late.input_value() == "0"
    )
    assert page.locator("output[data-joiners]").inner_text() == "100%"


def test_changes_that_ask_too_much_are_made_as_far_as_they_go_and_said(show):
    chain = Chain(
        States(["here", "busy", "gone"], exits=["gone"]), [[0.6, 0.3, 0.1], [0.3, 0.6, 0.1], [0, 0, 1]]
    )
    page = show(panel(chain, moves=[("here", "busy"), ("here", "gone")], periods=3, start={"here": 10}))
    found = page.evaluate(FIGURES, [[0.3, -0.09], 1, 0])
    assert found["met"] is False and sum(found["counts"][-1]) == pytest.approx(10)
    page.get_by_label("here to busy").fill("3000")
    page.get_by_label("here to gone").fill("-900")
    assert "made as far as they go" in page.locator("[data-words]").inner_text()


def test_it_redraws_within_a_frame_for_twelve_states(show):
    page = opened_veg(show)
    spent = page.evaluate("""() => {
        const slider = document.querySelector('input[data-move="0"]');
        const times = [];
        for (let k = 0; k < 60; k += 1) {
            slider.value = (k % 20) * 10;
            const begun = performance.now();
            slider.dispatchEvent(new Event('input'));
            document.querySelector('.cf-panel svg').getBoundingClientRect();  // layout done
            times.push(performance.now() - begun);
        }
        return times.sort((a, b) => a - b)[30];
    }""")
    assert spent < 16.7  # milliseconds, the median of sixty


def test_readable_without_scripts(show):
    page = opened_veg(show, java_script_enabled=False)
    text = page.locator("main").inner_text()
    assert "With scripts switched on" in text and "live customers at the end of 2027-09" in text
    assert not page.locator("form").is_visible() and not page.locator("figure").is_visible()
    now, then, gained = texts(page, "live")
    assert now == then and gained == "0" and now.replace(",", "").isdigit()


def test_screen_readers_and_narrow_screens(show):
    from axe_playwright_python.sync_playwright import Axe

    page = opened_veg(show, viewport={"width": 390, "height": 900})
    found = Axe().run(page, context=".cf-panel")
    assert found.violations_count == 0, found.generate_report()
    assert page.evaluate("document.documentElement.scrollWidth") <= 390


def test_two_panels_on_one_page_and_hostile_names(show, tmp_path):
    bad = "</script><script>document.title = 'caught'</script>"
    chain = Chain(States(["here", bad], exits=[bad]), [[0.9, 0.1], [0, 1]])
    one = panel(chain, moves=[("here", bad)], periods=2, start={"here": 10}, key="one")
    two = panel(chain, moves=[("here", "here")], periods=2, start={"here": 20}, key="two")

    class Both:
        html = f"{one.html}{two.html}"

    page = show(Both)
    assert page.title() == "panel" and page.said == []
    assert page.locator(".cf-panel[data-ready=yes]").count() == 2
    assert page.locator("#two [data-now=live]").inner_text() == "16"  # 20 x .81
    assert MONEY["currency"] == "GBP"
