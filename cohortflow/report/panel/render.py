"""The panel as HTML for the page and for notebooks: readable as it stands, alive where scripts run."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from cohortflow.report.chart.style import THEME
from cohortflow.report.panel.data import PanelData, panel_data
from cohortflow.report.rounding import count, missing, percent
from cohortflow.report.text import clean, label
from cohortflow.whatif.change import changed
from cohortflow.whatif.what_if import what_if


@dataclass(frozen=True, repr=False, eq=False)
class Panel:
    """A what-if panel. In a notebook it shows itself; `html` is the fragment for a page."""

    data: PanelData
    figures: tuple[tuple[str, str, float | None], ...]
    live: tuple[float, ...]
    key: str

    @property
    def html(self) -> Markup:
        """The fragment: style, controls, figures, data and script in one element."""
        return _fragment(self)

    def _repr_html_(self) -> str:
        theme = "; ".join(f"--{name}: {pair[0]}" for name, pair in THEME.items())
        return f'<div class="cf" style="{theme}">{self.html}</div>'

    def __repr__(self) -> str:
        return f"<what-if panel, {len(self.data.moves)} moves, {len(self.live) - 1} periods>"


def panel(
    model: Any,
    *,
    moves: Sequence[tuple[str, str]],
    periods: int = 12,
    start: Any = None,
    joiners: Any = None,
    value: Any = None,
    base_period: str | int | None = None,
    key: str = "what-if",
) -> Panel:
    """A panel with a slider for each of `moves` and for joiners; a live chart and figures beside them.

    Parameters
    ----------
    moves : (from, to) pairs; other arguments as for `what_if`
    key : id of the element; give each panel of one page its own

    The panel computes in the browser what `what_if` computes here, without intervals; it asks nothing of the
    network. Without scripts it shows the figures as they stand.

    >>> from cohortflow import Chain, States
    >>> chain = Chain(States(["here", "gone"], exits=["gone"]), [[0.9, 0.1], [0, 1]])
    >>> panel(chain, moves=[("here", "gone")], periods=2, start={"here": 10}, joiners={"here": 1})
    <what-if panel, 1 moves, 2 periods>
    """
    data = panel_data(
        model,
        moves=moves,
        periods=periods,
        start=start,
        joiners=joiners,
        value=value,
        base_period=base_period,
    )
    schedule = changed(data.schedule, ())
    stands = what_if(
        schedule, (), periods=periods, start=data.numbers["opening"], joiners=joiners, value=value,
        base_period=data.base,
    )  # fmt: skip
    live = (
        float(sum(data.numbers["opening"][k] for k in data.numbers["live"])),
        *stands.by_period["all_live"].base,
    )
    return Panel(data, tuple(_figures(data, stands)), tuple(map(float, live)), key)


def _figures(data: PanelData, stands: Any) -> list[tuple[str, str, float | None]]:
    """(key, words, number as it stands) of every figure shown."""
    end, names = data.labels[-1], data.schedule.states.exits
    out: list[tuple[str, str, float | None]] = [
        ("live", f"live customers at the end of {end}", float(stands.by_period["all_live"].base[-1]))
    ]
    for k, name in enumerate(names):
        out.append((f"lost-{k}", f"lost by {label(name)} until then", float(stands.by_period[name].base[-1])))
    if data.numbers["amounts"] is not None:
        unit = f" ({data.currency})" if data.currency else ""
        out.append(("value", f"contribution until then, discounted{unit}", float(stands.total["value"].base)))
    settled = stands.settled["all_live"].base if data.numbers["settles"] else float("nan")
    out.append(("settled", "live customers in the long run", None if missing(settled) else float(settled)))
    return out


def _fragment(made: Panel) -> Markup:
    end = made.data.labels[-1]
    words = {
        "title": "What if?",
        "words": "Move the sliders. What a move takes, the other moves of its row give up in proportion. The "
        "figures are expectations; their intervals are in the tables of scenarios and levers.",
        "static": "With scripts switched on, sliders for some moves and for joiners stand here. These are the "
        "figures of the forecast as it stands.",
        "chart": f"Live customers at the end of {end}: {count(made.live[-1])}.",
    }
    moves = [
        {
            "from": a,
            "to": b,
            "now": "" if rate is None else percent(rate),
            "least": low,
            "most": high,
            "step": step,
        }
        for a, b, rate, low, high, step in made.data.moves
    ]
    figures = [
        {"key": k, "words": w, "now": "not known" if n is None else count(n)} for k, w, n in made.figures
    ]
    text = _environment().get_template("panel.html").render(
        key=made.key, intro=words, moves=moves, labels=made.data.labels, joins=made.data.joins,
        figures=figures, live=[count(n) for n in made.live], data=_json(made.data), script=Markup(_asset("panel.js")),
        style=Markup(_asset("panel.css")),
    )  # fmt: skip
    return Markup(text)


def _json(data: PanelData) -> Markup:
    """The numbers as JSON that cannot end the script element it stands in."""
    text = json.dumps(data.numbers, ensure_ascii=False, allow_nan=False, separators=(",", ":"))
    for sign, code in (("<", "\\u003c"), (">", "\\u003e"), ("&", "\\u0026"), ("\u2028", "\\u2028")):
        text = text.replace(sign, code)
    return Markup(text)


def _asset(name: str) -> str:
    return files("cohortflow.report.panel").joinpath(name).read_text(encoding="utf-8").rstrip()


@cache
def _environment() -> Environment:
    env = Environment(
        loader=PackageLoader("cohortflow.report", "panel"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    env.filters.update(clean=clean)
    return env
