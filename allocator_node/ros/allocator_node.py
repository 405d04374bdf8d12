"""The lifecycle node: configure checks, activate drives, everything else makes robots stand."""

from __future__ import annotations

import functools
import traceback
from collections.abc import Callable
from typing import Any

import rclpy
from rcl_interfaces.msg import SetParametersResult
from rclpy.executors import SingleThreadedExecutor
from rclpy.lifecycle import LifecycleNode, LifecycleState, TransitionCallbackReturn
from rclpy.parameter import Parameter
from rclpy.signals import SignalHandlerOptions
from std_srvs.srv import SetBool, Trigger

from ..allocator import Allocator
from ..files.document import FileError
from ..team import Team
from ..team_file import merge_tasks, read_team
from . import parameters
from .ending import LISTEN, Ending
from .loop import Loop, Occupied
from .parameters import ParameterError


def told(transition: Callable) -> Callable:
    """Log an exception of a transition, which rclpy would swallow, and make robots stand."""

    @functools.wraps(transition)
    def wrapper(self: AllocatorNode, state: LifecycleState) -> TransitionCallbackReturn:
        try:
            return transition(self, state)
        except Exception:  # every cause must end the same way: standing robots, and a log
            self.get_logger().error(f"{transition.__name__} failed:\n{traceback.format_exc()}")
            if self.loop is not None:
                self.loop.stop()
            return TransitionCallbackReturn.ERROR

    return wrapper


class AllocatorNode(LifecycleNode):
    """The allocator on ROS 2 topics.

    Attributes:
        loop: What runs between configure and cleanup, else None.
    """

    def __init__(self, make_allocator: Callable[..., Any] = Allocator, **options: Any) -> None:
        """Declare parameters and services; ``options`` go to the node."""
        super().__init__("allocator", **options)
        self.loop: Loop | None = None
        self._make = make_allocator
        self._held = False
        parameters.declare(self)
        self.add_on_set_parameters_callback(self._check)
        self.add_post_set_parameters_callback(self._apply)
        self.create_service(SetBool, "~/hold", self._hold)
        self.create_service(Trigger, "~/forget", self._forget)

    # Transitions

    @told
    def on_configure(self, state: LifecycleState) -> TransitionCallbackReturn:
        """Read and check everything; start nothing if anything is wrong."""
        try:
            options, settings = parameters.read(parameters.values(self))
            team = self._team(options)
            orders = parameters.orders(options, team, self._held)
            self.loop = Loop(self, team, options, settings, orders, self._make)
            self._held = self.loop.allocator.orders.hold
        except (ParameterError, FileError, ImportError) as error:
            self.get_logger().error(f"not configured: {error}")
            return TransitionCallbackReturn.FAILURE
        self.get_logger().info(f"{len(team.robots)} robots, {len(team.tasks)} tasks")
        return TransitionCallbackReturn.SUCCESS

    @told
    def on_activate(self, state: LifecycleState) -> TransitionCallbackReturn:
        """Start the loop, unless somebody else drives our robots."""
        try:
            self.loop.start()
        except Occupied as error:
            self.get_logger().error(f"not activated: {error}")
            return TransitionCallbackReturn.FAILURE
        return super().on_activate(state)

    @told
    def on_deactivate(self, state: LifecycleState) -> TransitionCallbackReturn:
        """Make robots stand, then stop the loop."""
        self.loop.stop()
        return super().on_deactivate(state)

    @told
    def on_cleanup(self, state: LifecycleState) -> TransitionCallbackReturn:
        """Give every topic back."""
        self._close()
        return super().on_cleanup(state)

    @told
    def on_shutdown(self, state: LifecycleState) -> TransitionCallbackReturn:
        """Make robots stand and give every topic back."""
        self._close()
        return super().on_shutdown(state)

    @told
    def on_error(self, state: LifecycleState) -> TransitionCallbackReturn:
        """Make robots stand and go back to the beginning."""
        self._close()
        return super().on_error(state)

    def _close(self) -> None:
        if self.loop is not None:
            self.loop.close()
            self.loop = None

    def destroy_node(self) -> None:
        """Make robots stand before the node goes."""
        self._close()
        super().destroy_node()

    def _team(self, options: parameters.Options) -> Team:
        if not options.team_file:
            raise ParameterError("team_file is empty: give the path of the team file")
        team = read_team(options.team_file)
        if options.task_edit:
            team = merge_tasks(team, options.task_edit)
        return team

    # Parameters

    def _check(self, changes: list[Parameter]) -> SetParametersResult:
        now = parameters.values(self)
        wanted = parameters.changed(now, changes)
        try:
            options, _ = parameters.read(wanted)
            if self.loop is not None:
                for name in ("team_file", "state_file"):
                    if wanted[name] != now[name]:
                        raise ParameterError(f"{name} is read on configure; clean up first")
                team = self._edited(options, changes)
                parameters.orders(options, team, self._held)
                self.loop.check(options)
        except (ParameterError, FileError, Occupied) as error:
            return SetParametersResult(successful=False, reason=str(error))
        return SetParametersResult(successful=True)

    def _apply(self, changes: list[Parameter]) -> None:
        if self.loop is None:
            return
        options, settings = parameters.read(parameters.values(self))
        team = self._edited(options, changes)
        orders = parameters.orders(options, team, self._held)
        self.loop.apply(options, settings, orders, team)

    def _edited(self, options: parameters.Options, changes: list[Parameter]) -> Team:
        """Give the team as it is to be: another one only if ``task_edit`` was just set."""
        team = self.loop.allocator.team
        if not options.task_edit or all(change.name != "task_edit" for change in changes):
            return team
        return merge_tasks(team, options.task_edit)

    # Services

    def _hold(self, request: SetBool.Request, response: SetBool.Response) -> SetBool.Response:
        self._held = request.data
        if self.loop is not None:
            self.loop.hold(self._held)
        response.success = True
        response.message = "all robots stand" if self._held else "robots drive again"
        self.get_logger().info(response.message)
        return response

    def _forget(self, request: Trigger.Request, response: Trigger.Response) -> Trigger.Response:
        response.success = self.loop is not None
        if response.success:
            self.loop.allocator.forget()
        response.message = (
            "every robot is trusted again" if response.success else "the node is not configured"
        )
        self.get_logger().info(response.message)
        return response


def run(team_file: str | None, autostart: bool, arguments: list[str]) -> int:
    """Run the node until a signal ends it; robots stand before the process does.

    Args:
        team_file: Path for the parameter ``team_file``; None: as ROS arguments say.
        autostart: Configure and activate at once.
        arguments: ROS arguments.

    Returns:
        0, or 1 where autostart failed, or somebody else drives the robots.
    """
    # rclpy's own handlers would end the context before the last commands are sent.
    rclpy.init(args=arguments, signal_handler_options=SignalHandlerOptions.NO)
    ending = Ending()
    overrides = [] if team_file is None else [Parameter("team_file", value=team_file)]
    node = AllocatorNode(parameter_overrides=overrides)
    executor = SingleThreadedExecutor()
    try:
        executor.add_node(node)
        if autostart and not started(node):
            return 1
        while not ending.asked:
            executor.spin_once(timeout_sec=LISTEN)
            if autostart and node.loop is not None and node.loop.occupied:
                return 1
        return 0
    finally:
        node.destroy_node()
        rclpy.try_shutdown()


def started(node: AllocatorNode) -> bool:
    """Configure and activate a node; tell whether it worked."""
    success = TransitionCallbackReturn.SUCCESS
    return node.trigger_configure() == success and node.trigger_activate() == success
