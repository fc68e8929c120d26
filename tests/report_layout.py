"""Where the texts of a figure land: outside its edges, or on one another. For tests of charts."""

from __future__ import annotations

from itertools import combinations

from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.text import Text

from cohortflow.report.chart.style import house_style

TOUCH = 1.0  # pixels at 100 dpi that two boxes may share


def boxes(figure: Figure) -> list[tuple[str, float, float, float, float]]:
    """(text, x0, y0, x1, y1) in pixels of every visible text that says something."""
    with house_style():
        canvas = FigureCanvasAgg(figure)
        canvas.draw()
        hidden = _undrawn(figure)
        found = []
        for text in figure.findobj(Text):
            if text.get_visible() and text.get_text().strip() and text not in hidden:
                box = text.get_window_extent(canvas.get_renderer())
                found.append((text.get_text(), box.x0, box.y0, box.x1, box.y1))
    return found


def _undrawn(figure: Figure) -> set[Text]:
    """Tick labels outside the limits of their axis exist but are not drawn; findobj lists them too."""
    out = set()
    for axes in figure.axes:
        for axis, limits in ((axes.xaxis, axes.get_xlim()), (axes.yaxis, axes.get_ylim())):
            low, high = sorted(limits)
            out |= {t.label1 for t in axis.get_major_ticks() if not low - 1e-9 <= t.get_loc() <= high + 1e-9}
            if not axes.axison:
                out |= {t.label1 for t in axis.get_major_ticks()}
    return out


def clipped(figure: Figure) -> list[str]:
    """Texts that reach beyond the figure."""
    wide, high = figure.get_size_inches() * figure.dpi
    return [
        t
        for t, x0, y0, x1, y1 in boxes(figure)
        if x0 < -TOUCH or y0 < -TOUCH or x1 > wide + TOUCH or y1 > high + TOUCH
    ]


def overlapping(figure: Figure) -> list[tuple[str, str]]:
    """Pairs of texts whose boxes share more than a touch in both directions."""
    pairs = []
    for a, b in combinations(boxes(figure), 2):
        across = min(a[3], b[3]) - max(a[1], b[1])
        down = min(a[4], b[4]) - max(a[2], b[2])
        if across > TOUCH and down > TOUCH + 1.0:
            pairs.append((a[0], b[0]))
    return pairs
