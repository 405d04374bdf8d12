"""The loop: hear, decide, drive, tell; what exists between configure and cleanup."""

from __future__ import annotations

import time
import traceback
from collections.abc import Callable
from dataclasses import replace
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
from diagnostic_msgs.msg import DiagnosticArray
from rclpy.clock import Clock, ClockType
from rclpy.node import Node
from rclpy.timer import Timer
from visualization_msgs.msg import MarkerArray

from ..decision import Decision
from ..observation import Observation, Orders
from ..settings import Settings
from ..team import Team
from .clockwork import ClockWatch, Stillness
from .command_topics import CommandTopics, other_publishers
from .inbox import Inbox
from .loop_health import LoopHealth
from .markers import MarkerBoard
from .outbox import Outbox
from .parameters import Options
from .qos import LATCHED
from .recorder import RecorderBeside
from .state_file import StateFile

DISCOVERY = 1.0
"""Time a node needs to see the publishers of others, s."""

NEWCOMER = 3.0
"""Who has driven for less than this and finds somebody else driving gives way, s."""

REPORT_EVERY, MARKERS_EVERY, SAVE_EVERY = 1.0, 0.5, 2.0
"""Periods of diagnostics, markers and the state file, s."""

TELL_EVERY = 1.0
"""The same failure is logged once in this time, s."""

SET_BACK = 1.0
"""A clock set back further than this belongs to another run, s."""

SEARCH_SHARE = 0.1
"""Share of a period that the search for an assignment may take; longer ones go on beside."""

WATCH_EVERY, STILL = 0.5, 1.0
"""Period of looking whether time goes by, and after how long it does not, s."""

STOP_REPEATS = 3
"""The last command is sent so often: a robot may listen with best effort."""

HEARD_BY = 3.0
"""How long robots that have a task may take to be discovered after an activation, s."""


class Occupied(Exception):
    """Somebody else commands a robot of ours."""


class Loop:
    """Runs an allocator on the topics of a team.

    Attributes:
        allocator: The allocator.
        active: Whether the loop runs.
        occupied: Who drives our robots, where we gave way to it; "" if nobody.
    """

    def __init__(
        self,
        node: Node,
        team: Team,
        options: Options,
        settings: Settings,
        orders: Orders,
        make_allocator: Callable[..., Any],
    ) -> None:
        """Listen and announce, but decide nothing yet.

        Raises:
            ImportError: A pose comes from tf and tf2_ros is not installed.
        """
        self._node, self._log = node, node.get_logger()
        self._born = time.monotonic()
        self._make = make_allocator
        self._options = options
        self.active = False
        self.occupied = ""
        self.allocator = self._made(team, settings, orders)
        self._inbox = Inbox(node, team)
        self._outbox = Outbox(node, team)
        self._board = MarkerBoard(team)
        self._markers = node.create_publisher(MarkerArray, "~/markers", LATCHED)
        self._diagnostics = node.create_publisher(DiagnosticArray, "/diagnostics", 10)
        self._health = LoopHealth(node.get_name(), 1 / options.rate)
        self._state = StateFile(Path(options.state_file)) if options.state_file else None
        self._recorder: RecorderBeside | None = None
        self._commands: CommandTopics | None = None
        self._timer: Timer | None = None
        self._watcher: Timer | None = None
        self._steady = Clock(clock_type=ClockType.STEADY_TIME)
        self._stillness = Stillness()
        self._decision: Decision | None = None
        self._trace = ""
        self._clock = ClockWatch()
        self._awaited_until = self._drives_since = 0.0
        self._missed: Observation | None = None
        for robot in team.robots.values():
            if robot.navigates:
                self._log.warning(
                    f"{robot.name} drives by its own navigation: it is sent goals, and keeping "
                    "clear of others and of areas is left to it"
                )
        self._due = {"report": 0.0, "markers": 0.0, "save": 0.0}
        self._recall()

    # What the lifecycle asks for

    def start(self) -> None:
        """Start to decide, and to drive if the options say so.

        Raises:
            Occupied: Somebody else publishes on a command topic; nothing is started.
        """
        if self._options.command_robots:
            self._take_over()
        self._renew()
        self._await_robots(max(HEARD_BY, self.allocator.settings.pose_timeout))
        if self._options.record_to:
            self._record(Path(self._options.record_to))
        self.active = True
        self._set_timer()
        self._stillness = Stillness()
        self._watcher = self._node.create_timer(WATCH_EVERY, self._watch, clock=self._steady)

    def stop(self) -> None:
        """Make every robot stand, then stop deciding; does nothing the second time."""
        if self._timer is not None:
            self._node.destroy_timer(self._timer)
            self._timer = None
        if self._watcher is not None:
            self._node.destroy_timer(self._watcher)
            self._watcher = None
        self._let_go()
        self.occupied = ""
        if not self.active:
            return
        self.active = False
        self._health.pause()
        self._outbox.dismiss()
        self._markers.publish(self._board.clear())
        if self._recorder is not None:
            self._recorder.close()
            self._recorder = None
        if self._state is not None:
            try:
                self._state.save(self.allocator.memory())
            except OSError as error:
                self._log.error(f"state_file: nothing was saved: {error}")

    def close(self) -> None:
        """Stop, and give every topic back."""
        self.stop()
        self._inbox.close()
        self._outbox.close()
        self._node.destroy_publisher(self._markers)
        self._node.destroy_publisher(self._diagnostics)
        if self._state is not None:
            self._state.close()
        self.allocator.close()

    def _watch(self) -> None:
        """Make robots stand where the clock stands still, for then no period comes."""
        stood, told = self._stillness.look(self._now()), self._health.stalled > 0
        self._health.stalled = stood if stood >= STILL else 0.0
        if not self._health.stalled:
            return
        text = (
            f"no time has gone by for {stood:.0f} s: with use_sim_time, /clock must be published, "
            "and not paused; robots are told to stand"
        )
        self._log.error(text, throttle_duration_sec=10.0)
        if not told:
            self._guarded(self._stand)
        self._guarded(self._report)

    # What the operator asks for

    def check(self, options: Options) -> None:
        """Check that options can be applied now.

        Raises:
            Occupied: Driving is asked for and somebody else drives.
        """
        if self._is_to_take_over(options):
            self._refuse_if_occupied()

    def _is_to_take_over(self, options: Options) -> bool:
        """Tell whether robots are to be driven that are not yet."""
        wanted = options.command_robots and not self.occupied
        return self.active and wanted and self._commands is None

    def apply(self, options: Options, settings: Settings, orders: Orders, team: Team) -> None:
        """Take new options, settings, orders and, if it is another one, team."""
        rate, self._options = self._options.rate, options
        if not options.command_robots:
            self.occupied = ""
        self.allocator.settings = settings
        self.allocator.orders = replace(orders, driving=orders.driving and not self.occupied)
        if team is not self.allocator.team:
            self.allocator.edit(team, self._now())
            self._inbox.watch(team)
        if options.rate != rate:
            self._change_rate()
        if self._is_to_take_over(options):
            self._drive()
        elif not options.command_robots:
            self._let_go()

    def hold(self, hold: bool) -> None:
        """Make all robots stand at once, or go on; a restart changes nothing about it."""
        self.allocator.orders = replace(self.allocator.orders, hold=hold)
        if hold:
            self._guarded(self._stand)
        self._guarded(partial(self._save, surely=True))

    # The period

    def tick(self) -> None:
        """Do what is due; an exception makes the robots stand and is told, never raised."""
        self._health.begin()
        if not self._guarded(self._decide):
            self._guarded(self._stand)
        self._health.end()
        for what, every, act in (
            ("markers", MARKERS_EVERY, self._show),
            ("report", REPORT_EVERY, self._report),
            ("save", SAVE_EVERY, self._save),
        ):
            now = time.monotonic()
            if now >= self._due[what]:
                self._due[what] = now + every
                self._guarded(act)

    def _guarded(self, act: Callable[[], None]) -> bool:
        try:
            act()
        except Exception as error:  # the loop must go on whatever happens
            self._health.fail(error)
            self._tell_failure(traceback.format_exc())
            return False
        return True

    def _tell_failure(self, trace: str) -> None:
        """Log where the loop failed, in full only where it is news."""
        failed = f"the loop failed ({self._health.failures} times so far), robots are told to stand"
        if trace != self._trace:
            self._trace = trace
            self._log.error(f"{failed}:\n{trace}")
        else:
            again = f"{failed}: {trace.splitlines()[-1]}"
            self._log.error(again, throttle_duration_sec=TELL_EVERY)

    def _decide(self) -> None:
        now = self._now()
        if by := self._clock.look(now):
            self._stand()
            self._forget_times(by)
            return
        observation = self._inbox.observation(now, self.allocator.settings.pose_timeout)
        if self._missed is not None:
            observation, self._missed = observation.since(self._missed), None
        if self._awaits(observation):
            self._missed = observation
            self._stand()
            return
        decision = self.allocator.step(observation, now)
        self._decision = decision
        self._board.note(decision)
        if self._commands is not None:
            broken = self._commands.send(decision, self.allocator.orders.hold)
            if broken:
                error = ArithmeticError(f"commands are not finite for {', '.join(broken)}")
                self._health.fail(error)
                self._log.error(f"{error}: told to stand", throttle_duration_sec=TELL_EVERY)
        self._outbox.publish(decision)

    def _forget_times(self, by: float) -> None:
        """Start anew in time: the clock was set by so many seconds."""
        self._log.warning(
            f"the clock was set {'ahead' if by > 0 else 'back'} by {abs(by):.2f} s: "
            "what was heard is dropped, what was learned stays"
        )
        self._inbox.forget_times()
        if by < -SET_BACK:
            self._renew()
        self._await_robots(self.allocator.settings.pose_timeout)

    def _await_robots(self, seconds: float) -> None:
        """Give robots that have a task the time to be heard, before others get it."""
        self._awaited_until = time.monotonic() + seconds

    def _awaits(self, observation: Observation) -> bool:
        """Tell whether a robot that has a task may still be heard in time."""
        if time.monotonic() > self._awaited_until:
            return False
        busy = self.allocator.memory()["assignment"]
        heard = np.isfinite(observation.pose_times)
        return any(
            name in busy and not heard[i] for i, name in enumerate(self.allocator.team.robots)
        )

    def _renew(self) -> None:
        """Start beliefs about the present anew; keep what was learned, orders and tasks."""
        old = self.allocator
        self.allocator = self._made(old.team, old.settings, old.orders)
        self.allocator.recall(old.memory())
        old.close()

    def _made(self, team: Team, settings: Settings, orders: Orders) -> Any:
        period = 1 / self._options.rate
        allocator = self._make(team, settings, period, SEARCH_SHARE * period)
        allocator.orders = orders
        return allocator

    def _report(self) -> None:
        self._inbox.notice_publishers()
        others = []
        if self._commands is not None:
            others = other_publishers(self._node, self.allocator.team, own=1)
            for sentence in others:
                self._log.error(f"{sentence} too", throttle_duration_sec=10.0)
            if others and time.monotonic() - self._drives_since < NEWCOMER:
                self._give_way("; ".join(others))
        elif self.occupied:
            others = [f"not driving: {self.occupied}"]
        self._diagnostics.publish(
            self._health.diagnostics(
                self._decision,
                self._now(),
                self._inbox.complaints.recent(),
                self.allocator.unheard_health(),
                others,
                self._silent(),
            )
        )

    def _silent(self) -> dict[str, str]:
        """Give the robots not heard from, with what the graph shows about it."""
        if self._decision is None:
            return {}
        sources = self._inbox.sources()
        silent = {}
        for robot, heard in zip(self._decision.robots, self._decision.heard, strict=True):
            if not heard:
                topic = sources[robot]
                silent[robot] = f"nothing usable on {topic}"
                if topic.startswith("/") and not self._node.count_publishers(topic):
                    silent[robot] = f"nobody publishes on {topic}"
        return silent

    def _show(self) -> None:
        if self._decision is not None and self._node.count_subscribers(self._markers.topic_name):
            self._markers.publish(
                self._board.markers(self._decision, self.allocator.settings)
            )

    # Commands

    def _take_over(self) -> None:
        # A publisher that was there before us may not have been discovered yet.
        time.sleep(max(0.0, DISCOVERY - (time.monotonic() - self._born)))
        self._refuse_if_occupied()
        self._drive()

    def _drive(self) -> None:
        self.occupied, self._drives_since = "", time.monotonic()
        self._commands = CommandTopics(self._node, self.allocator.team)

    def _give_way(self, others: str) -> None:
        """Stop to drive: a node that was there before us was discovered late."""
        self.occupied = others
        self.allocator.orders = replace(self.allocator.orders, driving=False)
        self._log.error(
            f"{others}: this node came later and drives nobody; stop the other, then set "
            "command_robots to false and to true again"
        )
        self._let_go()

    def _refuse_if_occupied(self) -> None:
        others = other_publishers(self._node, self.allocator.team, own=0)
        if others:
            raise Occupied(
                f"{'; '.join(others)}: two nodes would fight over the robots; stop the other, or "
                "set command_robots to false"
            )

    def _stand(self) -> None:
        if self._commands is not None:
            self._commands.stand()

    def _let_go(self) -> None:
        if self._commands is None:
            return
        for _ in range(STOP_REPEATS):
            self._commands.stand()
            self._commands.deliver()
            time.sleep(0.02)
        self._commands.close()
        self._commands = None

    # Clock, memory and recording

    def _record(self, directory: Path) -> None:
        try:
            self._recorder = RecorderBeside(
                directory, Path(self._options.team_file), self._node.get_fully_qualified_name()
            )
            self._log.info(f"recording to {self._recorder.path}")
        except OSError as error:
            self._log.error(f"record_to: nothing is recorded: {error}")

    def _now(self) -> float:
        return self._node.get_clock().now().nanoseconds * 1e-9

    def _set_timer(self) -> None:
        if self._timer is not None:
            self._node.destroy_timer(self._timer)
        self._timer = self._node.create_timer(1 / self._options.rate, self.tick)

    def _change_rate(self) -> None:
        self._health.period = 1 / self._options.rate
        self._health.pause()
        self.allocator.period = 1 / self._options.rate
        self.allocator.assigner.budget = SEARCH_SHARE / self._options.rate
        if self.active:
            self._set_timer()

    def _save(self, surely: bool = False) -> None:
        if self._state is None:
            return
        try:
            self._state.save_soon(self.allocator.memory(), surely)
        except OSError as error:
            self._log.error(
                f"state_file: nothing is saved: {error}", throttle_duration_sec=10.0
            )

    def _recall(self) -> None:
        """Take up what a node before this one learned; a damaged file is set aside."""
        if self._state is None:
            return
        try:
            memory = self._state.load()
            if memory is not None:
                self.allocator.recall(memory)
                self._log.info(f"taken up from {self._state.path}")
            if self.allocator.orders.hold:
                self._log.warning("all robots stand, as before the restart: ~/hold lets them go")
        except OSError as error:
            self._log.error(
                f"state_file: {error}; starting without it, and writing none over it"
            )
            self._state.close()
            self._state = None
        except (ValueError, TypeError, LookupError, AttributeError) as error:
            self._log.warning(
                f"state_file: {self._state.path} is damaged ({error}); {self._set_aside()}, "
                "and nothing of it is used"
            )

    def _set_aside(self) -> str:
        """Keep a damaged file; say how, or why not."""
        try:
            return f"it is kept as {self._state.set_aside()}"
        except OSError as error:
            return f"it cannot be kept under another name ({error})"
