"""How long decisions took."""

from __future__ import annotations

from .canvas import Picture, axes, finished, time_axis
from .palette import BLUE, ORANGE
from .story import Run


def timing(run: Run) -> Picture | None:
    """Draw the longest decision of each second, and how often which time was needed."""
    rows = run.get("decision_ms") or []
    if not rows:
        return None
    figure, panels = axes(2.3, 1, 2)
    over_time, spread = panels[0]
    values = [row[1] for row in rows]
    over_time.plot([row[0] for row in rows], values, color=BLUE, linewidth=1)
    time_axis(over_time, run["seconds"])
    over_time.set_ylabel("ms")
    over_time.set_ylim(bottom=0)
    over_time.set_title("longest lately", fontsize=9)
    spread.hist(values, bins=30, color=ORANGE, hatch="///", edgecolor="white", linewidth=0.3)
    spread.set_xlabel("ms")
    spread.set_title("how often the longest was so long", fontsize=9)
    known = run["period_ms"]
    return finished(
        figure, "timing",
        f"Time of a decision: median {known['p50']:.1f} ms, 99 % below {known['p99']:.1f} ms, "
        f"longest {known['max']:.1f} ms.",
        "Wall time of a decision: in a rehearsal the longest of each second, in a recording that "
        "of the last 200 periods, as the node told it each second.",
    )  # fmt: skip
