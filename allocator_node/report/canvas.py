"""Pictures without a display and without global state."""

from __future__ import annotations

import io
from dataclasses import dataclass

from matplotlib import rc_context
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

DPI = 110
WIDTH = 11.5
"""Width of a picture, inches."""

STYLE = {
    "font.size": 9, "axes.spines.top": False, "axes.spines.right": False, "hatch.linewidth": 0.5,
    "axes.grid": True, "grid.color": "#dddddd", "grid.linewidth": 0.6, "axes.axisbelow": True,
    "legend.frameon": False,
}  # fmt: skip


@dataclass(frozen=True)
class Picture:
    """A finished picture: name of its file, PNG, text for those who do not see it, caption."""

    name: str
    png: bytes
    alt: str
    caption: str


def axes(height: float, rows: int = 1, columns: int = 1, width: float = WIDTH) -> tuple:
    """Give a figure with axes, height in inches."""
    with rc_context(STYLE):
        figure = Figure(figsize=(width, height), dpi=DPI, layout="constrained")
        FigureCanvasAgg(figure)
        made = figure.subplots(rows, columns, squeeze=False)
    return figure, (made[0, 0] if rows == columns == 1 else made)


def finished(figure: Figure, name: str, alt: str, caption: str) -> Picture:
    """Draw a figure."""
    out = io.BytesIO()
    with rc_context(STYLE):
        figure.savefig(out, format="png")
    return Picture(name, out.getvalue(), alt, caption)


def time_axis(ax: Axes, seconds: float) -> None:
    """Let an axis run over the run, in seconds or from ten minutes on in minutes."""
    ax.set_xlim(0, seconds)
    if seconds >= 600:
        ax.xaxis.set_major_formatter(lambda value, _: f"{value / 60:g}")
        step = next(s for s in (60, 120, 300, 600, 1800, 3600, 1e9) if seconds / s <= 15)
        ax.xaxis.set_major_locator(_every(step))
    ax.set_xlabel("min" if seconds >= 600 else "s")


def _every(step: float) -> object:
    from matplotlib.ticker import MultipleLocator

    return MultipleLocator(step)
