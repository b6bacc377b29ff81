#!/usr/bin/env bash
# Installs what is missing, builds, and runs every test: once as shipped, and the fast ones once more under
# the sanitizers. `tests/run.sh --quick` leaves the sanitizers out.
set -euo pipefail
cd "$(dirname "$0")/.."
. deploy/packages.sh
case "${1:-}" in
  "" | --quick) ;;
  *) echo "usage: tests/run.sh [--quick]" >&2; exit 2 ;;
esac

# shellcheck disable=SC2086
progress "packages" install_packages $packages_build $packages_test
export CMAKE_CXX_COMPILER_LAUNCHER=ccache NINJA_STATUS="[%f/%t %es] "

build() { cmake --preset "$1" >/dev/null && cmake --build --preset "$1" "${@:2}"; }

progress "build" build release
progress "tests" ctest --preset release
if [ "${1:-}" != "--quick" ]; then
  progress "build with the address and undefined-behaviour sanitizers" build address
  progress "fast tests with the address and undefined-behaviour sanitizers" ctest --preset address
  progress "build with the thread sanitizer" build thread --target threaded_tests
  progress "tests of threads with the thread sanitizer" ctest --preset thread
fi
echo "== every test passed in $SECONDS s"
