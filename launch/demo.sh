#!/bin/sh
# The demo: a simulated team on real ROS 2 topics, allocated, driven, broken and re-allocated.
#   sh launch/demo.sh [--distro kilted|jazzy] [arguments of team_demo]
set -eu
. "$(dirname "$0")/prepare.sh"

# The team and world of the solar farm, unless a team file is given.
for argument; do
    case $argument in
        *.yaml | *.yml | -h | --help) exec team_demo "$@" ;;
    esac
done
exec team_demo "$ROOT/config/solar_farm.yaml" "$ROOT/config/solar_farm_world.yaml" "$@"
