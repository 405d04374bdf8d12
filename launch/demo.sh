#!/bin/sh
# The demo: a simulated team on real ROS 2 topics, allocated, driven, broken and re-allocated.
#   sh launch/demo.sh [--distro kilted|jazzy] [arguments of team_demo, such as a team of your own]
set -eu
. "$(dirname "$0")/prepare.sh"
exec team_demo "$@"
