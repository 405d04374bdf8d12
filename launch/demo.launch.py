"""A simulated team and the allocator that drives it.

ros2 launch allocator_node demo.launch.py
"""

from launch import LaunchDescription
from launch.actions import DeclareLaunchArgument, IncludeLaunchDescription
from launch.substitutions import LaunchConfiguration, PathJoinSubstitution
from launch_ros.actions import Node
from launch_ros.substitutions import FindPackageShare

SHARE = FindPackageShare("allocator_node")


def generate_launch_description() -> LaunchDescription:
    """`team_sim` and the lifecycle node `allocator`, on one team file."""
    team_file, world_file = LaunchConfiguration("team_file"), LaunchConfiguration("world_file")
    return LaunchDescription(
        [
            DeclareLaunchArgument(
                "team_file",
                default_value=PathJoinSubstitution([SHARE, "config", "solar_farm.yaml"]),
                description="the team file (YAML)",
            ),
            DeclareLaunchArgument(
                "world_file",
                default_value=PathJoinSubstitution([SHARE, "config", "solar_farm_world.yaml"]),
                description="what happens to the simulated team (YAML)",
            ),
            Node(
                package="allocator_node",
                executable="team_sim",
                output="screen",
                emulate_tty=True,
                arguments=[team_file, world_file],
            ),
            IncludeLaunchDescription(
                PathJoinSubstitution([SHARE, "launch", "allocator.launch.py"]),
                launch_arguments={"team_file": team_file}.items(),
            ),
        ]
    )
