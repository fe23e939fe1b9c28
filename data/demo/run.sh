#!/bin/sh
# Installs what is missing, builds softsill and fits the four invented cells of this folder.
# Results go to results/ at the top of the project. A second run rebuilds nothing.
set -eu
cd "$(dirname "$0")/../.."
jobs=${JOBS:-2}

.ci/install_missing.sh build
# The demo needs no tests; leave them switched on where someone switched them on.
tests=
if [ ! -e build/release/CMakeCache.txt ]; then
  tests=-DSOFTSILL_BUILD_TESTS=OFF
fi
cmake --preset release $tests -Wno-dev >/dev/null
cmake --build --preset release -j "$jobs" --target softsill
softsill=build/release/softsill

# estimate NAME CELL [OPTIONS]: status 3 (not to be trusted) is a finding, not a failure.
estimate() {
  name=$1
  cell=$2
  shift 2
  printf '\n======== %s: softsill fit %s\n\n' "$name" "data/demo/$cell/cell.toml --before zero${*:+ $*}"
  status=0
  $softsill fit "data/demo/$cell/cell.toml" --out "results/$name" --before zero "$@" || status=$?
  [ "$status" = 0 ] || [ "$status" = 3 ] || exit "$status"
}

for cell in n03 n07 n11 n14; do
  printf '\n======== %s: softsill check data/demo/%s/cell.toml\n\n' "$cell" "$cell"
  $softsill check "data/demo/$cell/cell.toml"
  estimate "$cell" "$cell"
done
estimate n07-anchored n07 --anchor "resistance=210±15MOhm"

printf '\n======== Noise level Delta of the invented cells, mV\n\n'
printf '  %-14s%10s%20s%10s   %s\n' fit value "95 % interval" truth files
for name in n03 n07 n07-anchored n11 n14; do
  truth=$(awk -F, -v cell="${name%%-*}" '$1 == cell && $2 == "noise_level" { print $3 }' \
    data/demo/truth.csv)
  awk -F, -v name="$name" -v truth="${truth:--}" '
    $1 == "noise_level" && !seen {
      seen = 1
      value = $2 == "" ? "-" : sprintf("%.2f", $2)
      ends = $3 == "" ? "-" : sprintf("%.2f .. %.2f", $3, $4)
      printf "  %-14s%10s%20s%10s   results/%s/\n", name, value, ends, truth, name
    }
    END { if (!seen) printf "  %-14s%10s%20s%10s   results/%s/\n", name, "-", "-", truth, name }
  ' "results/$name/parameters.csv"
done
