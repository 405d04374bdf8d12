"""What each robot used and what it has left."""

from __future__ import annotations

from .canvas import Picture, axes, finished
from .palette import BLACK, ORANGE, SKY
from .story import Run, energy_left


def energy(run: Run) -> Picture | None:
    """Draw a row a robot; None where nothing is known of batteries."""
    robots = run["robots"]
    used, left = run["energy_wh"], energy_left(run)
    if not used and not left:
        return None
    figure, ax = axes(1.0 + (0.26 if len(robots) <= 30 else 0.17) * max(len(robots), 2))
    rows = range(len(robots))
    ax.barh(rows, [left.get(r, 0.0) for r in robots], height=0.62, color=SKY, edgecolor=BLACK,
            linewidth=0.4, label="left")  # fmt: skip
    ax.barh(rows, [used.get(r, 0.0) for r in robots], left=[left.get(r, 0.0) for r in robots],
            height=0.62, color=ORANGE, hatch="///", edgecolor=BLACK, linewidth=0.4,
            label="used")  # fmt: skip
    site = run["site"]
    kept = [site["reserve"].get(r, 0.0) * site["capacity_wh"].get(r, 0.0) for r in robots]
    ax.plot(kept, rows, "|", color=BLACK, markersize=11, markeredgewidth=2, label="reserve")
    for row, robot in enumerate(robots):
        text = f"{used.get(robot, 0.0):.1f} used"
        if robot in left:
            text += f", {left[robot]:.0f} left"
        ax.text(left.get(robot, 0.0) + used.get(robot, 0.0), row, f" {text}", va="center",
                fontsize=8)  # fmt: skip
    ax.set_yticks(rows, robots)
    ax.set_ylim(len(robots) - 0.4, -0.6)
    ax.margins(x=0.16)
    ax.set_xlim(left=0)
    ax.grid(False, axis="y")
    ax.set_xlabel("Wh")
    ax.legend(loc="lower right", ncols=3, fontsize=8, bbox_to_anchor=(1, 1))
    total = sum(used.values())
    most = max(used, key=used.get, default="")
    return finished(
        figure, "energy",
        f"Energy: {total:.1f} Wh used in all"
        + (f", most by {most} ({used[most]:.1f} Wh)." if most else "."),
        "Hatched: used; plain: left in the battery at the end; bar across: the reserve.",
    )  # fmt: skip
