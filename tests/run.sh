#!/bin/sh
# All tests, on real ROS 2:
#   sh tests/run.sh [--distro kilted|jazzy] [arguments of pytest]
set -eu
. "$(dirname "$0")/../launch/prepare.sh"

cd "$ROOT"
echo "Tests on ROS 2 $distro ($source), $("$PYTHON" -V)."
# One more worker than cores it is meant for: much of what tests on ROS 2 do is wait.
exec "$PYTHON" -m pytest -n 3 --dist loadfile --no-loadscope-reorder "$@"
