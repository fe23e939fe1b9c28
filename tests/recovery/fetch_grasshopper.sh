#!/bin/sh
# Puts the recordings of a grasshopper's auditory receptor (Debian package python3-nitime,
# nitime/data, BSD licence) into the folder $1. Without the package the folder stays empty and the
# test that needs it is skipped by name.
set -eu
folder=$1
[ -e "$folder/grasshopper_spike_times2.txt" ] && exit 0
work=$(mktemp -d)
trap 'rm -rf "$work"' EXIT
cd "$work"
if ! apt-get -q download python3-nitime >log 2>&1; then
  # Package lists may be missing on a fresh machine.
  if ! { apt-get -q update >>log 2>&1 && apt-get -q download python3-nitime >>log 2>&1; }; then
    tail -n 3 log
    echo "python3-nitime cannot be downloaded"
    exit 0
  fi
fi
dpkg -x python3-nitime_*.deb unpacked
mkdir -p "$folder"
for which in stimulus1 stimulus2 spike_times1 spike_times2; do
  cp "unpacked/usr/lib/python3/dist-packages/nitime/data/grasshopper_$which.txt" "$folder/"
done
