#!/bin/sh
# Makes the environment that `make` runs in, and does nothing when it is there already.
#
#     tools/setup_venv.sh [kilted|jazzy] [run|test]
#
# The first word picks constraints/<set>.txt, and with it the folder: .venv for kilted, .venv-<set> for the others. `run`
# brings what the robot's programs need, `test` what checks and tests need on top. A stamp in the folder says what was
# installed, from which files, and with which Python. PYTHON names another interpreter than python3.
# Exit status: 0 ready, 2 can't be done; then one line says why and what would do.
set -u
LC_ALL=C
export LC_ALL

fail() {
    echo "set-up: $*" >&2
    exit 2
}

cd "$(dirname "$0")/.." || exit 2
set=${1:-kilted}
level=${2:-run}
python=${PYTHON:-python3}

case $set in
    kilted) venv=.venv extra=headless newest=14 ;;
    jazzy) venv=.venv-jazzy extra=headless-jazzy newest=12 ;; # NumPy 1.26 has wheels up to Python 3.12
    *) fail "SET=$set is not known; use SET=kilted (the newest, default) or SET=jazzy" ;;
esac
case $level in
    run) extras=$extra ;;
    test) extras=$extra,test ;;
    *) fail "'$level' is not known; use 'run' or 'test'" ;;
esac

# The base interpreter, so that an activated .venv can be made anew from inside itself.
found=$("$python" -c 'import sys; print(sys.version_info[0], sys.version_info[1], getattr(sys, "_base_executable", sys.executable)); print(sys.version)' 2>/dev/null) ||
    fail "'$python' does not run; install Python 3.10 to 3.$newest (apt install python3 python3-venv), or name one: make PYTHON=/path/to/python3"
read -r major minor base <<END
$found
END
version=${found#*"
"}
if [ "$major" != 3 ] || [ "$minor" -lt 10 ] || [ "$minor" -gt $newest ]; then
    fail "'$python' is Python $major.$minor, but the $set set needs 3.10 to 3.$newest; name such a one: make PYTHON=python3.$newest"
fi

stamp() { # what is installed is told by these files, this place, this interpreter
    { echo "$version" "$PWD" "$1" && cat setup.py setup.cfg pyproject.toml "constraints/$set.txt"; } | cksum
}
is_ready() { # `test` holds all that `run` needs
    [ -x $venv/bin/python ] || return 1
    for have in "$@"; do
        [ -f "$venv/set-up-$have" ] && [ "$(cat "$venv/set-up-$have")" = "$(stamp "$have")" ] && return 0
    done
    return 1
}
if [ "$level" = run ]; then wanted="run test"; else wanted=test; fi
# shellcheck disable=SC2086
is_ready $wanted && exit 0

machine=$(uname -sm)
[ "$machine" = "Linux x86_64" ] ||
    fail "this machine is '$machine', but the ROS wheels are for Linux x86_64; elsewhere build the package with colcon in a ROS installation"
"$base" -c 'import ensurepip, venv' 2>/dev/null ||
    fail "Python $major.$minor can't make environments: apt install python3-venv (or python$major.$minor-venv), then call make again"

if command -v flock >/dev/null 2>&1; then # two calls at once on a fresh tree: the second waits, and finds it done
    exec 9>"$venv.lock"
    flock 9
    # shellcheck disable=SC2086
    is_ready $wanted && exit 0
fi

# Settings that send pip elsewhere than into this environment; index, proxy, certificate and cache settings stay.
unset PIP_TARGET PIP_PREFIX PIP_ROOT PIP_PYTHON PIP_DRY_RUN PIP_NO_DEPS PIP_REQUIRE_HASHES PYTHONPATH PYTHONHOME
PIP_USER=0 PIP_DISABLE_PIP_VERSION_CHECK=1 PIP_RETRIES=${PIP_RETRIES:-2}
export PIP_USER PIP_DISABLE_PIP_VERSION_CHECK PIP_RETRIES

log=$venv.log
for have in run test; do # a stamp of other files must not come true again after a half-done install
    is_ready $have || rm -f "$venv/set-up-$have"
done
made=$("$venv/bin/python" -c 'import sys; print(sys.version)' 2>/dev/null)
if [ "$version" != "$made" ] || ! "$venv/bin/python" -m pip --version >/dev/null 2>&1; then
    "$base" -m venv --clear "$venv" >"$log" 2>&1 || fail "'$base -m venv $venv' failed: $(tail -n 1 "$log") (see $log)"
fi

echo "set-up: installing the $set set into $venv, about 1 GB; this takes a minute or two (see $log)"
if ! "$venv/bin/python" -m pip install -c "constraints/$set.txt" -e ".[$extras]" >"$log" 2>&1; then
    lacking=$(sed -n 's/.*satisfies the requirement \([^ ]*\) .*(from versions: none).*/\1/p' "$log" | head -n 1)
    if [ -n "$lacking" ] ||
        grep -qiE 'ConnectionError|ConnectTimeout|ReadTimeout|NameResolution|ProxyError|SSLError|Max retries' "$log"; then
        fail "the package index can't be reached${lacking:+ (or lacks $lacking)}: check the network, or set PIP_INDEX_URL or HTTPS_PROXY, then call make again (see $log)"
    fi
    fail "pip failed: $(grep -m 1 '^ERROR' "$log" || tail -n 1 "$log") (see $log)"
fi
# The simulated robot's inner loops, once for this machine: nothing has to wait for the compiler later on.
"$venv/bin/python" -c 'import ballbal_ros.simulation.compiled' >>"$log" 2>&1 ||
    fail "the simulated robot's inner loops can't be compiled: $(tail -n 1 "$log") (see $log)"
stamp "$level" >"$venv/set-up-$level"
