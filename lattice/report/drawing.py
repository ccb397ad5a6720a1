"""Charts as SVG that take their ink from the page, so that they fit light, dark and paper."""

from __future__ import annotations

import io
import re
from collections.abc import Callable
from typing import Any

INK = "#010203"
"""Stands for the page's ink while a chart is drawn."""
_FIRST = ("#2878b5", "#d1721c", "#3d9a50", "#b5488c", "#8a7a2e")
COLOURS = (*_FIRST, "#6b64c9", "#c9473b", "#5b8a94", "#8d8d8d")
"""Told apart on white and on black, and by most colour-blind readers; lines differ in marker, too."""
MARKERS = ("o", "s", "^", "D", "v", "P", "X", "*", ".")
_STYLE = {
    "svg.fonttype": "none",
    "font.family": "sans-serif",
    "font.size": 10.0,
    "text.color": INK,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.titlecolor": INK,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.color": INK,
    "ytick.color": INK,
    "legend.frameon": False,
    "hatch.color": INK,
    "hatch.linewidth": 0.6,
}


def draw_chart(name: str, draw: Callable[[Any], None], width: float = 7.0, height: float = 3.6) -> str:
    """Return the SVG of what `draw` puts on axes; `name` keeps its inner names apart from other charts'."""
    import matplotlib

    matplotlib.use("Agg")
    from matplotlib.figure import Figure

    with matplotlib.rc_context({**_STYLE, "svg.hashsalt": name}):
        figure = Figure(figsize=(width, height), layout="constrained")
        draw(figure.subplots())
        out = io.StringIO()
        figure.savefig(out, format="svg", transparent=True, metadata={"Date": None, "Creator": None})
    text = out.getvalue()
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    text = text[text.index("<svg") :].replace(INK, "currentColor")
    # Parts that matplotlib names the same in every chart.
    prefix = re.sub(r"\W+", "-", name)
    return re.sub(r'(id="|href="#|url\(#)', rf"\g<1>{prefix}-", text)


def ranks_axis(axes: Any, counts: list[int], label: str = "MPI ranks") -> None:
    """Make the horizontal axis one of rank counts."""
    axes.set_xscale("log", base=2)
    axes.set_xticks(counts, [str(n) for n in counts])
    axes.minorticks_off()
    axes.set_xlabel(label)
