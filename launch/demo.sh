#!/usr/bin/env bash
# The demo in one command: installs what it needs into an environment of its own, then runs `fieldnav demo` with the
# arguments given here.
set -euo pipefail

# shellcheck source=launch/environment.sh
source "$(dirname "${BASH_SOURCE[0]}")/environment.sh"
use_environment .venv-demo bags,report
exec fieldnav demo "$@"
