"""The allocator alone: in your own stack, include this and give it your team file.

ros2 launch allocator_node allocator.launch.py team_file:=/path/to/team.yaml
"""

from launch import LaunchDescription
from launch.actions import DeclareLaunchArgument, EmitEvent, LogInfo, RegisterEventHandler
from launch.conditions import IfCondition
from launch.events import matches_action
from launch.substitutions import LaunchConfiguration
from launch_ros.actions import LifecycleNode
from launch_ros.event_handlers import OnStateTransition
from launch_ros.events.lifecycle import ChangeState
from launch_ros.parameter_descriptions import ParameterValue
from lifecycle_msgs.msg import Transition

ARGUMENTS = (
    DeclareLaunchArgument("team_file", description="the team file (YAML)"),
    DeclareLaunchArgument("rate", default_value="10.0", description="decisions a second, Hz"),
    DeclareLaunchArgument("namespace", default_value="", description="namespace of the node"),
    DeclareLaunchArgument(
        "state_file",
        default_value="",
        description="where what was learned, done and decided survives a restart (empty: none)",
    ),
    DeclareLaunchArgument(
        "record_to",
        default_value="",
        description="directory under which each activation leaves a recording (empty: none)",
    ),
    DeclareLaunchArgument(
        "command_robots",
        default_value="true",
        description="false: decide and publish, but drive nobody",
    ),
    DeclareLaunchArgument(
        "autostart", default_value="true", description="configure and activate at once"
    ),
)


def generate_launch_description() -> LaunchDescription:
    """The lifecycle node, and with `autostart` its way to the state `active`."""
    allocator = LifecycleNode(
        package="allocator_node",
        executable="allocator",
        name="allocator",
        namespace=LaunchConfiguration("namespace"),
        output="screen",
        emulate_tty=True,
        parameters=[
            {
                name: ParameterValue(LaunchConfiguration(name), value_type=kind)
                for name, kind in (
                    ("team_file", str),
                    ("rate", float),
                    ("state_file", str),
                    ("record_to", str),
                    ("command_robots", bool),
                )
            }
        ],
    )
    autostart = IfCondition(LaunchConfiguration("autostart"))

    def change(transition: int) -> EmitEvent:
        event = ChangeState(
            lifecycle_node_matcher=matches_action(allocator), transition_id=transition
        )
        return EmitEvent(event=event, condition=autostart)

    def on(start: str, goal: str, action) -> RegisterEventHandler:
        return RegisterEventHandler(
            OnStateTransition(
                target_lifecycle_node=allocator,
                start_state=start,
                goal_state=goal,
                entities=[action],
            )
        )

    def refused(transition: str) -> LogInfo:
        """A refusal stops here and not the whole launch, which may be somebody's entire stack."""
        return LogInfo(
            msg=[
                f"allocator did not {transition}: see its message above, then run: ",
                "ros2 lifecycle set ",
                LaunchConfiguration("namespace"),
                f"/allocator {transition}",
            ]
        )

    return LaunchDescription(
        [
            *ARGUMENTS,
            allocator,
            on("configuring", "inactive", change(Transition.TRANSITION_ACTIVATE)),
            on("configuring", "unconfigured", refused("configure")),
            on("activating", "inactive", refused("activate")),
            change(Transition.TRANSITION_CONFIGURE),
        ]
    )
