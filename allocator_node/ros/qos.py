"""Quality of service of the topics (ROS 2 design article "ROS QoS policies")."""

from rclpy.qos import DurabilityPolicy, QoSProfile, ReliabilityPolicy

NEWEST = QoSProfile(depth=1, reliability=ReliabilityPolicy.BEST_EFFORT)
"""Only the newest message counts; matches reliable and best-effort publishers."""

REPORTS = QoSProfile(depth=1000, reliability=ReliabilityPolicy.BEST_EFFORT)
"""Many may come between two decisions. Reports are repeated: over a bad link none waits
for one that was lost."""

GOALS = QoSProfile(depth=10)
"""The newest good one counts; a bad one does not hide the one before it."""

COMMANDS = QoSProfile(depth=1)
"""Reliable, and never an old command after a newer one."""

LATCHED = QoSProfile(depth=1, durability=DurabilityPolicy.TRANSIENT_LOCAL)
"""Late joiners get the last message."""

HISTORY = QoSProfile(depth=200, durability=DurabilityPolicy.TRANSIENT_LOCAL)
"""Late joiners get the last 200 messages."""
