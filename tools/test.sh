#!/usr/bin/env bash
# Installs what is missing, then runs every test: the R tests on the installed package,
# and the C++ core on its own under the address and undefined-behaviour sanitizers.
# The last line counts tests; the exit code says whether all passed.
set -euo pipefail
# shellcheck source=tools/setup.sh
. "$(dirname "${BASH_SOURCE[0]}")/setup.sh"

start_counting

run_r_tests() {
  say "Running the R tests."
  Rscript tools/run-tests.R "$scratch/r-counts" || say "The R tests stopped early."
  if [ -s "$scratch/r-counts" ]; then
    # shellcheck disable=SC2046  # three words
    count $(cat "$scratch/r-counts")
  else
    count 0 1
  fi
}

ensure_core_tools() {
  local name absent=()
  if ! apt_usable; then
    have cmake || fail "Install cmake, GoogleTest and Eigen, and run this again."
    return
  fi
  have cmake || absent+=(cmake)
  have g++ || absent+=(g++)
  for name in make libgtest-dev libeigen3-dev; do
    apt_installed "$name" || absent+=("$name")
  done
  [ ${#absent[@]} -eq 0 ] || apt_install "${absent[@]}"
}

# A build folder that came along with a moved clone names sources elsewhere.
drop_foreign_build() {
  local cache=tests/cpp/build/CMakeCache.txt
  [ -e "$cache" ] || return 0
  grep -qxF "CMAKE_HOME_DIRECTORY:INTERNAL=$root/tests/cpp" "$cache" ||
    rm -rf tests/cpp/build
}

build_core_tests() {
  drop_foreign_build
  cmake -S tests/cpp -B tests/cpp/build && cmake --build tests/cpp/build -j "$cores"
}

# junit_count ATTRIBUTE: a number from the first element of the report of ctest.
junit_count() {
  local attribute="[[:space:]]$1=\"\([0-9][0-9]*\)\""
  sed -n "/$attribute/{s/.*$attribute.*/\1/p;q;}" "$scratch/core.xml"
}

count_core_tests() {
  local bad idle
  bad=$(junit_count failures)
  idle=$(($(junit_count skipped) + $(junit_count disabled)))
  count $(($(junit_count tests) - bad - idle)) "$bad" "$idle"
}

run_core_tests() {
  if ! run_logged "Building the tests of the C++ core." build_core_tests; then
    count 0 1
    return
  fi
  say "Running the tests of the C++ core."
  ctest --test-dir tests/cpp/build -j "$cores" --no-tests=error --output-on-failure \
    --output-junit "$scratch/core.xml" >"$scratch/ctest.log" 2>&1 ||
    grep -v ' Passed ' "$scratch/ctest.log"
  if [ -s "$scratch/core.xml" ]; then
    count_core_tests
  else
    count 0 1
  fi
}

ensure_r
use_writable_library
ensure_packages Depends Imports LinkingTo
ensure_packages Suggests || say "Tests that need them are skipped."
ensure_core_tools
install_lambdabar
run_r_tests
run_core_tests
[ "$failed" -eq 0 ]
