#!/bin/sh
# Installs what the tests need, builds, and runs every test but the long ones.
#   tests/run.sh         some minutes
#   tests/run.sh --all   the long ones too (recovery and coverage by simulation)
#   tests/run.sh -R fit  further words go to ctest
set -eu
cd "$(dirname "$0")/.."
labels="-LE ^long\$"
if [ "${1:-}" = --all ]; then
  labels=
  shift
fi
jobs=${JOBS:-2}

.ci/install_missing.sh build test
cmake --preset release -DSOFTSILL_BUILD_TESTS=ON -Wno-dev >/dev/null
cmake --build --preset release -j "$jobs"
# shellcheck disable=SC2086
exec ctest --preset release -j "$jobs" $labels "$@"
