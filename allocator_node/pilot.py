"""How everybody moves: from the goal of each robot to commands that keep their distance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .belief.efficacy import Step
from .belief.poses import Places
from .model import Model
from .program import Control, ControlProblem, Safety, SafetyRows, solve_control
from .program.courtesy import make_way
from .program.guidance import Course, Guidance, Targets
from .program.headway import WANTS, Headway
from .program.safety import rolled
from .program.steering import Steering
from .program.ways import Ways
from .settings import Settings
from .team import Team
from .view import View


@dataclass(frozen=True)
class Motion:
    """How the team moves in one period.

    Attributes:
        course: What each robot was asked to do.
        control: What it may do.
        rows: The rows between the two.
        stuck: Time each robot has come no nearer to its goal, s, shape (N,).
    """

    course: Course
    control: Control
    rows: SafetyRows
    stuck: np.ndarray


@dataclass(frozen=True)
class Progress:
    """Attributes: progress since the last period, and the ways to the goals then, m, (N,)."""

    step: Step
    distance: np.ndarray


class Pilot:
    """Drives the team: ways around areas, guidance, courtesy, safe control.

    Attributes:
        commands: Commands of the last period, shape (N, 4); for robots with their own
            navigation the nominal ones.
        safety: Rows that may not be traded for progress.
        ways: Ways around the site's areas.
    """

    def __init__(self, team: Team, model: Model, settings: Settings) -> None:
        """Begin with everybody standing."""
        count = len(model.robots)
        self.commands = np.zeros((count, 4))
        self._guidance = Guidance(count)
        self._last: tuple[np.ndarray, np.ndarray, Course] | None = None
        self._trail = np.zeros((count, 2))
        self._headway = Headway(count)
        self._clearance: np.ndarray | None = None
        self.survey(team, model, settings)

    def survey(self, team: Team, model: Model, settings: Settings) -> None:
        """Look at the site anew: its areas, and the distances to keep."""
        self.safety = Safety(team, model, settings)
        clearance = self.safety.reach + settings.margin
        if self._clearance is None or (clearance != self._clearance).any():
            self._clearance = clearance
            self.ways = Ways(team, clearance)
            self._steering = Steering(team, model, clearance)

    def restart(self, robots: np.ndarray) -> None:
        """Begin anew for robots (n,) that got another task."""
        self._guidance.restart(robots)

    def forget(self) -> None:
        """Draw no conclusion from the motion until the next period."""
        self._last = None

    def progress(self, points: np.ndarray, now: float, dt: float) -> Progress | None:
        """Compare the motion since the last period with what its commands implied.

        Args:
            points: Control points now, m, shape (N, 3).
            now: Time, s.
            dt: Time since the last period, s.

        Returns:
            The progress along the ways to the goals; None where there was no last period.
        """
        if self._last is None:
            return None
        former, implied, course = self._last
        expected = (course.to_goal * implied).sum(axis=1) * dt
        measured = (course.to_goal * (points - former)).sum(axis=1)
        return Progress(Step(now, expected, measured, course.demand > 0), course.distance)

    def drive(
        self,
        view: View,
        model: Model,
        targets: Targets,
        insistence: np.ndarray,
        hold: bool,
        settings: Settings,
    ) -> Motion:
        """Find this period's commands, and remember them.

        Args:
            view: What is known.
            model: The team.
            targets: Goal of each robot.
            insistence: How much each robot insists on its way where two meet, shape (N,).
            hold: Whether everybody is to stand.
            settings: Weights and times.
        """
        places = view.places
        # Robots with their own navigation take goals, no commands.
        obeys = places.steady & ~model.navigates
        course = self._course(view, model, targets, obeys, settings)
        lowest, highest = model.fleet.command_box(
            self.commands, view.dt, view.poses[:, 2], settings.gamma_s, self._steering.gear
        )
        still = ~obeys | hold
        lowest[still] = highest[still] = 0.0
        silent_for = np.where(places.known & ~places.steady, places.age, 0.0)
        growth = rolled(model.fleet.max_speed, silent_for, settings)
        drift = np.where(model.navigates[:, None], places.velocities[:, :2], 0.0)
        self._extend_trails(places, view.dt)
        rows = self.safety.rows(view.points, places.known, obeys, growth, drift, self._trail)
        control = solve_control(
            ControlProblem(
                jacobians=view.jacobians,
                limits=model.fleet.limits,
                lowest=lowest,
                highest=highest,
                gear=self._steering.gear,
                round_limit=model.fleet.round_limit,
                away=course.away,
                demand=np.where(still | course.exact, 0.0, course.demand),
                preferred=course.preferred,
                rows=rows,
                slack_weight=settings.slack_weights(model.fleet.cruise) * insistence,
            )
        )
        self._remember(view, model, course, control, rows, hold)
        if not hold:
            wants = targets.busy & (course.demand > WANTS * model.fleet.cruise)
            self._headway.update(targets.points[:, :2], course.distance, wants, view.dt)
        return Motion(course, control, rows, self._headway.stuck)

    def _extend_trails(self, places: Places, dt: float) -> None:
        """Keep how far the commands since each robot's last pose may have taken it, m."""
        sent = np.zeros_like(self._trail) if self._last is None else self._last[1][:, :2]
        fresh = places.steady & (places.age < 1.5 * dt)
        self._trail = np.where(fresh[:, None], sent * dt, self._trail + sent * dt)

    def _course(
        self, view: View, model: Model, targets: Targets, obeys: np.ndarray, settings: Settings
    ) -> Course:
        """Give what each robot should do, safety aside."""
        lead = self.ways.lead(view.points, targets.points[:, None], targets.busy[:, None])
        course = self._guidance.course(model, targets, view.poses, view.points, lead, settings)
        course = self._steering.course(
            course,
            model,
            targets,
            poses=view.poses,
            points=view.points,
            velocities=view.places.velocities,
            known=view.places.known,
            held=self._guidance.held,
            aside=self._guidance.aside,
            settings=settings,
            dt=view.dt,
        )
        return make_way(
            course,
            view.points,
            obeys & ~targets.busy,
            model.fleet.cruise,
            self.safety.reach + settings.margin / 2,
            model.fleet.flies,
            settings.height_clearance,
        )

    def _remember(
        self,
        view: View,
        model: Model,
        course: Course,
        control: Control,
        rows: SafetyRows,
        hold: bool,
    ) -> None:
        """Keep what the next period's progress is compared with, and who was held back."""
        self.commands = control.commands.copy()
        implied = np.matmul(view.jacobians, control.commands[:, :, None])[:, :, 0]
        own = model.navigates & view.places.steady & (not hold)
        # Their own navigation is expected to bring them on at their nominal speed.
        implied[own] = course.to_goal[own] * course.demand[own, None]
        self.commands[own, 0] = course.demand[own]
        if not hold:
            free = np.matmul(view.jacobians, control.free[:, :, None])[:, :, 0]
            slow = model.fleet.steered | np.isfinite(model.fleet.speed_up) | course.exact
            free[~slow] = np.nan
            blocked = _blocked(course, implied, rows)
            self._guidance.notice(
                course, implied, free, blocked, model.fleet.cruise, view.dt
            )
        self._last = (view.points, implied, course)


def _blocked(course: Course, velocities: np.ndarray, rows: SafetyRows) -> np.ndarray:
    """Tell which robots could not go straight on at half the speed demanded, (N,).

    Args:
        course: What each robot should do.
        velocities: What all of them do now, m/s, shape (N, 3).
        rows: The safety rows.
    """
    straight = course.to_goal * (course.demand / 2)[:, None]
    blocked = np.zeros(len(straight), dtype=bool)
    blocked[rows.first[rows.slackness(straight, velocities) < 0]] = True
    pair = (rows.second >= 0) & (rows.slackness(velocities, straight) < 0)
    blocked[rows.second[pair]] = True
    return blocked
