#!/bin/sh
# install_missing.sh KIND...: installs the packages of these kinds (see packages) that are not there
# yet. Asks apt for nothing when all are.
set -eu
here=$(dirname "$0")
missing=
for kind in "$@"; do
  for package in $(sed -n "s/^$kind //p" "$here/packages"); do
    if ! dpkg -s "$package" 2>/dev/null | grep -q '^Status: install ok installed'; then
      missing="$missing $package"
    fi
  done
done
[ -n "$missing" ] || exit 0
echo "Installing:$missing"
export DEBIAN_FRONTEND=noninteractive
sudo=
if [ "$(id -u)" != 0 ]; then
  sudo="sudo -E"
fi
$sudo apt-get update -qq
# shellcheck disable=SC2086
$sudo apt-get install -y -qq --no-install-recommends $missing >/dev/null
