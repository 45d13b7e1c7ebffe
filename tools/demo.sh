#!/usr/bin/env bash
# Installs what is missing and runs the main job on the invented market.
set -euo pipefail
# shellcheck source=tools/setup.sh
. "$(dirname "${BASH_SOURCE[0]}")/setup.sh"

ensure_r
use_writable_library
ensure_packages Depends Imports LinkingTo
install_lambdabar
Rscript tools/demo.R
