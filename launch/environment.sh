# Makes the virtual environment that one of the project's commands runs in. Sourced by launch/demo.sh and test/run.sh.
# shellcheck shell=bash

say() { printf 'fieldnav: %s\n' "$*" >&2; }

fail() {
    say "$*"
    exit 1
}

# use_environment NAME EXTRAS: installs the clone in editable form with EXTRAS into the environment NAME in the clone,
# or in the user's cache where the clone cannot be written to, and puts that environment first on PATH. What is
# there already is used again for as long as nothing that decides about its contents has changed: setup files, this
# file, Python, place, ROS. The sources are no part of that, since an editable installation links to them.
# Sets source_dir, the folder installed from.
use_environment() {
    local name=$1 extras=$2 clone home base ros venv stamp
    clone=$(cd "$(dirname "${BASH_SOURCE[0]}")/.." && pwd)
    leave_other_environment
    base=$(find_python)
    ros=$(find_ros "$base")
    if [ "${ros%%:*}" = sourced ]; then
        base=${ros#*:} ros=sourced
    else
        extras+=,ros
    fi

    home=$(writable_home "$clone")
    source_dir=$clone
    [ "$home" = "$clone" ] || source_dir=$home/source
    venv=$home/$name
    mkdir -p "$venv" || fail "cannot make the folder $venv"

    # One installation at a time; the lock goes with the descriptor, also when this is interrupted.
    exec 9<"$venv"
    if command -v flock >/dev/null; then flock 9; fi
    [ "$source_dir" = "$clone" ] || copy_sources "$clone" "$source_dir"
    stamp=$(contents "$base" "$ros" "$extras" "$source_dir" "$venv")
    if [ "$stamp" != "$(cat "$venv/stamp" 2>/dev/null)" ]; then
        make_environment "$base" "$ros" "$extras" "$source_dir" "$venv"
        printf '%s\n' "$stamp" >"$venv/stamp"
    fi
    exec 9<&-

    export VIRTUAL_ENV=$venv PATH=$venv/bin:$PATH
    unset PYTHONHOME
}

# Started from inside an environment that has ROS from wheels, we inherit its library path and the mark that keeps
# Python from setting another: the new environment would load the old one's libraries.
leave_other_environment() {
    if [ -n "${_ROS_WHEELS_BOOTSTRAP_COMPLETE:-}" ]; then
        unset _ROS_WHEELS_BOOTSTRAP_COMPLETE LD_LIBRARY_PATH
    fi
}

# Prints the interpreter that environments are made from: not that of an environment that happens to be active.
find_python() {
    local python=${PYTHON:-python3}
    command -v "$python" >/dev/null || fail "$python is not to be found; install Python 3.10 or later"
    "$python" -c 'import sys; sys.exit(sys.version_info < (3, 10))' 2>/dev/null ||
        fail "$python is $("$python" --version 2>&1), must be Python 3.10 or later (set PYTHON to use another)"
    "$python" -c 'import ensurepip, venv' 2>/dev/null ||
        fail "$python has no venv module; install it (on Debian and Ubuntu: apt install python3-venv)"
    "$python" -c 'import os, sys; print(os.path.realpath(getattr(sys, "_base_executable", sys.executable)))'
}

# Prints sourced:PYTHON where a ROS installation is sourced that PYTHON can load, or wheels.
find_ros() {
    local python
    for python in "$1" /usr/bin/python3; do
        # Wheels in the system's own Python would count as rclpy, but cannot be reached from an environment.
        if "$python" -c 'import importlib.util, sys, rclpy
sys.exit(importlib.util.find_spec("ros_wheels_bootstrapper") is not None)' 2>/dev/null; then
            printf 'sourced:%s\n' "$python"
            return
        fi
        [ -n "${ROS_DISTRO:-}" ] || break
    done
    [ -z "${ROS_DISTRO:-}" ] ||
        fail "ROS 2 $ROS_DISTRO is sourced, but $1 cannot load its rclpy; set PYTHON to the Python it was built for"
    [ "$(uname -s) $(uname -m)" = "Linux x86_64" ] ||
        fail "there are no ROS 2 wheels for $(uname -s) on $(uname -m); source a ROS 2 installation (Jazzy or Kilted) first"
    printf 'wheels\n'
}

# Prints the folder that environments are put in: the clone, or one in the user's cache.
writable_home() {
    if [ -w "$1" ]; then
        printf '%s\n' "$1"
    else
        printf '%s/fieldnav_ros/%s\n' "${XDG_CACHE_HOME:-${HOME:-/tmp}/.cache}" "$(printf '%s' "$1" | sha256sum | cut -c1-12)"
    fi
}

# Installing writes into the folder installed from, so that a clone that cannot be written to is copied first, and
# again only where it has changed: somebody may be running from the copy.
copy_sources() {
    local pack=(tar -C "$1" --sort=name --mode=u+w --exclude=./.git --exclude='./.venv*' --exclude=./build
        --exclude=./install --exclude=./log -cf - .) digest
    digest=$("${pack[@]}" | sha256sum)
    if [ "$digest" != "$(cat "$2.digest" 2>/dev/null)" ]; then
        rm -rf "$2"
        mkdir -p "$2"
        "${pack[@]}" | tar -C "$2" -xf - || fail "cannot copy $1 to $2"
        printf '%s\n' "$digest" >"$2.digest"
    fi
}

# Prints a line that changes with everything that decides what an environment holds.
contents() {
    {
        printf '%s\n' "$@"
        "$1" --version
        (cd "$4" && cat setup.py setup.cfg pyproject.toml fieldnav_ros/__init__.py launch/environment.sh)
    } | sha256sum
}

make_environment() {
    local base=$1 ros=$2 extras=$3 sources=$4 venv=$5
    local log=$venv/install.log options=(--clear) pip=()
    [ "$ros" != sourced ] || options+=(--system-site-packages)
    # Where only the requirements changed, what is installed already is kept.
    if [ "$(cat "$venv/made-from" 2>/dev/null)" != "$base $ros $venv" ] || ! "$venv/bin/python" -c 'import pip' 2>/dev/null
    then
        "$base" -m venv "${options[@]}" "$venv" >&2 || fail "cannot make a virtual environment in $venv"
        printf '%s\n' "$base $ros $venv" >"$venv/made-from"
    fi
    if [ "$ros" = sourced ]; then
        # The message packages of an installation are compiled against the numpy that came with it.
        "$base" -c 'import numpy; print("numpy==" + numpy.__version__)' >"$venv/constraints.txt" 2>/dev/null || true
        pip+=(--constraint "$venv/constraints.txt")
    fi
    pip=("$venv/bin/python" -m pip --disable-pip-version-check install --quiet --no-input --retries 2 --prefer-binary
        --no-compile "${pip[@]}" --editable "${sources}[$extras]")
    show_progress "$log" "${pip[@]}" || fail "$(explain "$log")"
    # pip compiles nothing here, since most of what it installs is never imported. What we import is compiled now, once,
    # and not by several nodes that start at the same moment. What cannot be imported says so when it is needed.
    "$venv/bin/python" -c 'import importlib, pkgutil, fieldnav_ros
for module in pkgutil.walk_packages(fieldnav_ros.__path__, "fieldnav_ros."):
    importlib.import_module(module.name)' >>"$log" 2>&1 || true
}

# show_progress LOG COMMAND...: runs the command with its output in LOG and, at a terminal, the seconds it has taken.
show_progress() {
    local log=$1 ticker='' result=0
    shift
    say "installing into ${log%/*} (once, about a minute)"
    SECONDS=0
    # The command itself stays in the foreground: an interrupt reaches it and all that it has started.
    trap 'exit 130' INT
    if [ -t 2 ]; then
        tick $$ &
        ticker=$!
    fi
    "$@" >"$log" 2>&1 || result=$?
    if [ -n "$ticker" ]; then
        kill "$ticker" 2>/dev/null || true
        wait "$ticker" 2>/dev/null || true
        printf '\r       \r' >&2
    fi
    trap - INT
    [ "$result" -ne 0 ] || say "installed in $SECONDS s"
    return "$result"
}

# tick PROCESS: counts seconds on one line for as long as the process is there.
tick() {
    while kill -0 "$1" 2>/dev/null; do
        printf '\r%4d s ' "$SECONDS" >&2
        sleep 1
    done
}

# Prints in one sentence why pip failed.
explain() {
    if grep -qiE 'name resolution|NewConnectionError|ConnectTimeout|Max retries|unreachable|ProxyError|SSLError|Read timed out' "$1"; then
        printf 'cannot reach the Python package index; check the network and pip'\''s settings (details: %s)\n' "$1"
    elif grep -qi 'No space left' "$1"; then
        printf 'the disk is full (details: %s)\n' "$1"
    else
        printf 'pip could not install what is needed: %s (details: %s)\n' "$(grep -m1 '^ERROR' "$1" | cut -c8-)" "$1"
    fi
}
