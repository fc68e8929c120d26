"""One look for every chart: colours, type, sizes, and how a figure becomes SVG text.

Colours are told apart by lightness as well as by hue, and every line also differs by dash or marker, so that
charts read in grey and with any colour vision. The page swaps them for its dark ones (`THEME`).
"""

from __future__ import annotations

import io
import re
import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from functools import cache, lru_cache
from typing import Any

from matplotlib import rc_context
from matplotlib.axes import Axes
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties, get_font_names
from matplotlib.text import Text
from matplotlib.textpath import TextToPath
from matplotlib.ticker import MaxNLocator

from cohortflow.report.rounding import percent
from cohortflow.report.text import clean, wrap

INK, SOFT, FAINT, PAPER = "#1b2a33", "#4f606b", "#c3ccd1", "#fdfdfc"
FUTURE, BAND, MODEL, MODEL_BAND = "#0a5f86", "#bcdbe8", "#a8480a", "#f3d3bd"
SHADES = ("#f1f5f3", "#dbe8e4", "#bfd9d2", "#94c0b6", "#5e9f93", "#2f7a6e", "#12544a")
THEME = {
    "ink": (INK, "#e8eef1"),
    "soft": (SOFT, "#a9b8c1"),
    "faint": (FAINT, "#46545d"),
    "paper": (PAPER, "#12191e"),
    "future": (FUTURE, "#6cc1e6"),
    "band": (BAND, "#1f4d61"),
    "model": (MODEL, "#f0a173"),
    "model-band": (MODEL_BAND, "#5a3722"),
    "shade-0": (SHADES[0], "#182126"),
    "shade-1": (SHADES[1], "#1d312f"),
    "shade-2": (SHADES[2], "#21433e"),
    "shade-3": (SHADES[3], "#27594f"),
    "shade-4": (SHADES[4], "#2f6b60"),
    "shade-5": (SHADES[5], "#6db3a3"),
    "shade-6": (SHADES[6], "#a9dacd"),
}
WIDE, NARROW = 9.0, 3.9
BODY, SMALL, TITLE = 8.5, 7.2, 11.0
FONT = "DejaVu Sans"
OTHER_SCRIPTS = (
    "Noto Sans CJK JP", "Noto Sans CJK SC", "WenQuanYi Micro Hei", "Yu Gothic", "Microsoft YaHei", "Hiragino Sans",
    "Noto Sans Arabic", "Noto Sans Hebrew", "Noto Sans Devanagari", "Noto Sans Thai",
)  # fmt: skip
MARGIN = 0.12
RC: dict[Any, Any] = {
    "svg.fonttype": "none",
    "svg.hashsalt": "cohortflow",
    "text.parse_math": False,
    "text.usetex": False,
    "font.size": BODY,
    "text.color": INK,
    "axes.edgecolor": FAINT,
    "axes.labelcolor": SOFT,
    "axes.facecolor": "none",
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.unicode_minus": False,
    "axes.formatter.use_mathtext": False,
    "xtick.color": SOFT,
    "ytick.color": SOFT,
    "xtick.labelsize": SMALL,
    "ytick.labelsize": SMALL,
    "xtick.major.size": 2.5,
    "ytick.major.size": 0.0,
    "lines.linewidth": 1.6,
    "lines.solid_capstyle": "round",
    "figure.facecolor": PAPER,
    "savefig.facecolor": PAPER,
    "path.simplify": False,
}


class Drawing(Figure):
    """A matplotlib Figure that also knows its text alternative and shows itself in a notebook as SVG.

    `alt` says in words what the chart shows; `head` is the height in inches taken by title and subtitle.
    """

    alt: str = ""
    head: float = 0.0

    def _repr_svg_(self) -> str:
        return svg(self)

    def savefig(self, fname: Any, **options: Any) -> None:
        """As matplotlib's, with installed fonts for scripts that the base font lacks (pictures made of pixels)."""
        with house_style():
            self._set_family([FONT, *_other_fonts()])
            super().savefig(fname, **options)
            self._set_family(FONT)

    def _set_family(self, family: str | list[str]) -> None:
        for text in self.findobj(Text):
            text.set_fontfamily(family)


@contextmanager
def house_style() -> Iterator[None]:
    """The settings under which figures are drawn and saved; global settings stay as they were."""
    with rc_context({**RC, "font.family": [FONT]}), warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        yield


@cache
def _other_fonts() -> tuple[str, ...]:
    """Installed fonts for scripts that the base font lacks; for pixels only, never for SVG."""
    known = set(get_font_names())
    return tuple(name for name in OTHER_SCRIPTS if name in known)


def drawing(title: str, subtitle: str, *, width: float, body: float, alt: str) -> Drawing:
    """An empty figure `width` inches wide: title and subtitle at the top, `body` inches left below them."""
    titles = fit_lines(title, width - 2 * MARGIN, TITLE, bold=True)
    subtitles = fit_lines(subtitle, width - 2 * MARGIN, SMALL)
    head = MARGIN + 0.195 * len(titles) + 0.135 * len(subtitles) + 0.1
    figure = Drawing(figsize=(width, head + body + MARGIN), dpi=100)
    figure.alt, figure.head = alt, head
    top = MARGIN
    for line in titles:
        write(figure, MARGIN, top, line, size=TITLE, weight="bold")
        top += 0.195
    for line in subtitles:
        write(figure, MARGIN, top + 0.03, line, size=SMALL, color=SOFT)
        top += 0.135
    return figure


def write(figure: Drawing, left: float, top: float, text: str, **style: Any) -> Text:
    """Text at inches from the top left corner of the figure."""
    w, h = figure.get_size_inches()
    style = {"va": "top", "ha": "left", "size": BODY, **style}
    return figure.text(left / w, 1 - top / h, text, **style)


def panel(figure: Drawing, left: float, top: float, width: float, height: float) -> Axes:
    """Axes at inches from the left edge and from the end of the head."""
    w, h = figure.get_size_inches()
    bottom = h - figure.head - top - height
    return figure.add_axes((left / w, bottom / h, width / w, height / h))


@lru_cache(maxsize=20_000)
def text_width(text: str, size: float, *, bold: bool = False) -> float:
    """Width of a text in inches, with some air for browsers that set another typeface."""
    prop = FontProperties(family=FONT, size=size, weight="bold" if bold else "normal")
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        measured, _, _ = TextToPath().get_text_width_height_descent(text, prop, ismath=False)
    return 1.05 * float(measured) / 72


def fit_lines(text: str, inches: float, size: float, *, bold: bool = False, lines: int = 0) -> list[str]:
    """The text broken into lines that are at most `inches` wide; with `lines`, shortened to fit them."""
    return wrap(clean(text), inches, lines or None, measure=lambda t: text_width(t, size, bold=bold))


def svg(figure: Figure) -> str:
    """The figure as SVG text: the same bytes for the same figure, on every machine with the same libraries.

    Text stays text, set in a font family that browsers have; no dates, no random ids.
    """
    out = io.StringIO()
    with house_style():
        canvas: Any = FigureCanvasSVG(figure)
        canvas.print_svg(out, metadata={"Date": None, "Creator": None, "Format": None, "Type": None})
    drawn = out.getvalue()
    drawn = drawn[drawn.index("<svg") :]
    drawn = re.sub(r"\s*<metadata>.*?</metadata>", "", drawn, flags=re.S)
    return drawn.replace(f"'{FONT}'", f"'{FONT}', Verdana, sans-serif")


def quiet_axis(axes: Axes, *, grid: str = "y") -> None:
    """Faint grid along one axis, no frame but the base line."""
    axes.grid(axis=grid, color=FAINT, linewidth=0.5, alpha=0.7)  # type: ignore[arg-type]
    axes.set_axisbelow(True)
    axes.spines["left"].set_visible(False)


def share_ticks(axes: Axes) -> None:
    """A few ticks at round shares, printed as what they are."""
    axes.yaxis.set_major_locator(MaxNLocator(3, steps=[1, 2, 5, 10]))
    axes.yaxis.set_major_formatter(lambda v, _: percent(v, 0 if abs(v * 100 - round(v * 100)) < 1e-6 else 1))


def apart(places: Sequence[float], sizes: Sequence[float]) -> list[float]:
    """Where to print labels of these sizes near these places, inside 0 to 1, in the same order, none on another.

    Labels that touch move apart together, as little as their sum of squares allows.

    >>> [round(p, 6) for p in apart([0.5, 0.52, 0.9], [0.1, 0.1, 0.1])]
    [0.46, 0.56, 0.9]
    """
    blocks: list[list[int]] = []
    for k in sorted(range(len(places)), key=lambda k: places[k]):
        blocks.append([k])
        while len(blocks) > 1 and _end(blocks[-2], places, sizes) > _low(blocks[-1], places, sizes):
            last = blocks.pop()
            blocks[-1] += last
    out = [0.0] * len(places)
    for block in blocks:
        at = _low(block, places, sizes)
        for k in block:
            out[k] = at + sizes[k] / 2
            at += sizes[k]
    return out


def _low(block: Sequence[int], places: Sequence[float], sizes: Sequence[float]) -> float:
    """Low end of labels stacked on one another, as near to their places as 0 and 1 allow."""
    size = wanted = 0.0
    for k in block:
        wanted += (places[k] - size - sizes[k] / 2) / len(block)
        size += sizes[k]
    return min(max(wanted, 0.0), max(1.0 - size, 0.0))


def _end(block: Sequence[int], places: Sequence[float], sizes: Sequence[float]) -> float:
    return _low(block, places, sizes) + sum(sizes[k] for k in block)


def shade(share: float, steps: Sequence[float]) -> int:
    """Which of the shades stands for a share: the number of `steps` at or below it."""
    return sum(share >= step for step in steps)
