"""All that knows ROS 2: the lifecycle node, the simulated team's node, messages in and out."""
