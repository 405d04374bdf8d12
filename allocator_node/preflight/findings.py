"""Everything the preflight finds, and its strict JSON."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict, dataclass
from typing import Any

from ..decision import Decision, Shortfall
from ..model import Model
from ..settings import Settings
from ..team import Team
from ..work import Work
from .endurance import Endurance, endurance
from .extras import Case, Extra, TooLarge, best_extra
from .losses import Losses, Outcome, single_losses
from .room import Tight, tight
from .standing import decide
from .start import Place, places
from .stopping import Stopping, stopping
from .suitability import Fit, fits

SUGGESTIONS = 3
"""Extra features suggested at most."""


@dataclass(frozen=True, kw_only=True)
class Assumptions:
    """What the team file does not say.

    Attributes:
        rate: Decisions a second, Hz.
        latency: From a pose to the robot's answer, s; 0.2 is common practice.
    """

    rate: float = 10.0
    latency: float = 0.2


@dataclass(frozen=True, kw_only=True)
class Findings:
    """What the preflight found.

    Attributes:
        team: The team.
        assumed: What the file does not say.
        fits: For each robot its fit for each task.
        start: Who would start where.
        shortfalls: What would be uncovered at the start.
        waiting: Tasks that are not active at the start.
        losses: Every single loss, harmful ones first.
        pairs: Pairs of robots worse than either alone; None: not asked for.
        extras: Features worth adding, the best first; None: too large to be searched.
        endurance: Each standing task.
        stopping: Each robot.
        tight: Places that edges keep robots from.
        unwatched: (robot, feature) that no diagnostic speaks for: its failure would only
            show in the robot's progress.
    """

    team: Team
    assumed: Assumptions
    fits: list[list[Fit]]
    start: list[Place]
    shortfalls: tuple[Shortfall, ...]
    waiting: tuple[str, ...]
    losses: list[Outcome]
    pairs: list[Outcome] | None
    extras: list[Extra] | None
    endurance: list[Endurance]
    stopping: list[Stopping]
    tight: list[Tight]
    unwatched: list[tuple[str, str]]

    @property
    def harmful(self) -> list[Outcome]:
        """The single losses that leave something uncovered."""
        return [outcome for outcome in self.losses if outcome.harm]

    @property
    def covered(self) -> bool:
        """Whether every need is met at the start and after every single loss."""
        return not self.shortfalls and not self.harmful

    def as_json(self) -> dict[str, Any]:
        """Give all of it as JSON-able data; numbers that are not finite are null."""
        names = [robot.name for robot in self.team.robots.values()]
        return _finite({
            "covered": self.covered,
            "robots": names,
            "tasks": list(self.team.tasks),
            "assumptions": asdict(self.assumed),
            "suitability": [
                {**asdict(fit), "ways": {k: _way(self.team, k, w) for k, w in fit.ways.items()}}
                for row in self.fits
                for fit in row
            ],
            "start": [asdict(place) for place in self.start],
            "shortfalls": [asdict(shortfall) for shortfall in self.shortfalls],
            "waiting": list(self.waiting),
            "losses": [_plain(outcome) for outcome in self.losses],
            "pairs": None if self.pairs is None else [_plain(pair) for pair in self.pairs],
            "extras": None if self.extras is None else [asdict(extra) for extra in self.extras],
            "endurance": [asdict(one) for one in self.endurance],
            "stopping": [{**asdict(one), "within": one.within} for one in self.stopping],
            "tight": [asdict(one) for one in self.tight],
            "unwatched": [{"robot": robot, "feature": f} for robot, f in self.unwatched],
        })


def inspect(
    team: Team,
    settings: Settings | None = None,
    assumed: Assumptions | None = None,
    pairs: bool = False,
    on_progress: Callable[[str, int, int], None] = lambda what, done, of: None,
) -> Findings:
    """Find out what would go wrong with a team.

    Args:
        team: The team.
        settings: Weights and times; default as in :class:`Settings`.
        assumed: What the file does not say.
        pairs: Whether to look at every two robots too.
        on_progress: Called with what is looked at, how many are done, of how many.
    """
    settings, assumed = settings or Settings(), assumed or Assumptions()
    start = decide(team, settings)
    model = Model(team)
    losses = Losses(team, settings, start)
    singles = losses.singles(_counted(on_progress, "losses", sum(1 for _ in single_losses(team))))
    worse = None
    if pairs:
        count = len(team.robots) * (len(team.robots) - 1) // 2
        worse = losses.pairs(singles, _counted(on_progress, "pairs", count))
    return Findings(
        team=team,
        assumed=assumed,
        fits=fits(team, start.able),
        start=places(model, start),
        shortfalls=start.shortfalls,
        waiting=tuple(n for n, on in zip(team.tasks, Work(team).active(), strict=True) if not on),
        losses=singles,
        pairs=worse,
        extras=_extras(team, settings, start, singles, on_progress),
        endurance=endurance(team, start),
        stopping=stopping(team, settings, 1 / assumed.rate, assumed.latency),
        tight=tight(team, settings),
        unwatched=[
            (robot.name, feature)
            for robot in team.robots.values()
            for feature in robot.features
            if all(rule.feature != feature for rule in robot.health or ())
        ],
    )


def weak_cases(start: Decision, outcomes: list[Outcome]) -> list[Case]:
    """Give the cases that leave something uncovered: no loss at all, and single losses."""
    always = frozenset(shortfall.task for shortfall in start.shortfalls)
    cases = [Case(None, always)] if always else []
    return cases + [
        Case(outcome.loss, frozenset(shortfall.task for shortfall in outcome.shortfalls))
        for outcome in outcomes
        if outcome.harm
    ]


def weak_points(team: Team, settings: Settings) -> int:
    """Count the tasks left uncovered at the start and by each single loss."""
    start = decide(team, settings)
    singles = Losses(team, settings, start).singles()
    return sum(len(case.uncovered) for case in weak_cases(start, singles))


def _extras(
    team: Team,
    settings: Settings,
    start: Decision,
    singles: list[Outcome],
    on_progress: Callable[[str, int, int], None],
) -> list[Extra] | None:
    cases = weak_cases(start, singles)
    found: list[Extra] = []
    for done in range(SUGGESTIONS):
        on_progress("extras", done, SUGGESTIONS)
        try:
            extra = best_extra(team, settings, cases, found)
        except TooLarge:
            return None
        if extra is None:
            break
        found.append(extra)
    on_progress("extras", SUGGESTIONS, SUGGESTIONS)
    return found


def _counted(
    on_progress: Callable[[str, int, int], None], what: str, of: int
) -> Callable[[], None]:
    done = 0

    def count() -> None:
        nonlocal done
        done += 1
        on_progress(what, done, of)

    return count


def _plain(outcome: Outcome) -> dict[str, Any]:
    return {
        "kind": outcome.loss.kind,
        "robots": list(outcome.loss.robots),
        "feature": outcome.loss.feature,
        "uncovered": list(outcome.uncovered),
        "shortfalls": [asdict(shortfall) for shortfall in outcome.shortfalls],
        "step_in": {task: list(robots) for task, robots in outcome.steps.items()},
    }


def _way(team: Team, capability: str, number: int) -> dict[str, Any]:
    way = team.capabilities[capability][number]
    return {"with": list(way.features), "grade": way.grade}


def _finite(data: Any) -> Any:
    """Give data in which numbers that are not finite are None (RFC 8259 has no others)."""
    if isinstance(data, dict):
        return {key: _finite(value) for key, value in data.items()}
    if isinstance(data, list | tuple):
        return [_finite(value) for value in data]
    if isinstance(data, float) and data - data != 0:
        return None
    return data
