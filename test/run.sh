#!/usr/bin/env bash
# All checks in one command: lint, types, tests (which build and try the package with colcon as well), in an
# environment of its own. Arguments go to pytest.
set -euo pipefail

# shellcheck source=launch/environment.sh
source "$(dirname "${BASH_SOURCE[0]}")/../launch/environment.sh"
use_environment .venv-test test,colcon
cd "$source_dir"

# A ROS installation brings pytest plugins of its own, which not every pytest can load.
if [ -n "${ROS_DISTRO:-}" ]; then
    export PYTEST_DISABLE_PLUGIN_AUTOLOAD=1 PYTEST_ADDOPTS="${PYTEST_ADDOPTS:-} -p _hypothesis_pytestplugin"
fi

result=0
ruff check . || result=1
# The annotations are checked against numpy's own, which are others in the versions for Python 3.10 and in most ROS
# installations.
if python -c 'import numpy, sys; sys.exit(tuple(map(int, numpy.__version__.split(".")[:2])) < (2, 4))'; then
    mypy || result=1
else
    say "types are not checked here: that takes numpy 2.4 or later"
fi
[ "$result" -eq 0 ] || say "ruff or mypy found faults (above); running the tests all the same"
# In two processes beside each other, as half of the time goes by waiting for nodes to find each other: each has a ROS
# domain of its own. What the second says comes after the first has ended.
if [ "$#" -gt 0 ]; then
    pytest "$@" || result=$?
else
    log=$(mktemp)
    trap 'rm -f "$log"' EXIT
    set -m # without job control a process in the background, and all that it starts, would be deaf to SIGINT
    pytest test/nodes test/faults test/test_layouts.py >"$log" 2>&1 &
    set +m
    nodes=$!
    trap 'rm -f "$log"; kill -- "-$nodes" 2>/dev/null || true' EXIT
    pytest --ignore test/nodes --ignore test/faults --ignore test/test_layouts.py || result=$?
    wait "$nodes" || result=$?
    cat "$log"
fi
exit "$result"
