#!/usr/bin/env bash
# Installs what is missing, builds nightweigh, starts it on an invented market, feeds it three years of
# closes, and shows what a person would look at. `--once` stops the service at the end.
set -euo pipefail
cd "$(dirname "$0")/.."
. deploy/packages.sh

once=false
case "${1:-}" in
  "") ;;
  --once) once=true ;;
  *) echo "usage: deploy/demo.sh [--once]" >&2; exit 2 ;;
esac
folder=$PWD/var/demo
program=$PWD/build/release/nightweigh
settings=$folder/nightweigh.yaml
pid_file=$PWD/var/demo.pid

# shellcheck disable=SC2086
progress "packages" install_packages $packages_build
export CMAKE_CXX_COMPILER_LAUNCHER=ccache NINJA_STATUS="[%f/%t %es] "
build() { cmake --preset release -DBUILD_TESTING=OFF >/dev/null && cmake --build --preset release --target nightweigh; }
progress "build" build

# A service of an earlier run is stopped, and its data goes: each run starts afresh.
if [ -f "$pid_file" ] && old=$(cat "$pid_file") && [ "$(readlink "/proc/$old/exe" 2>/dev/null)" = "$program" ]; then
  echo "== stopping the service of an earlier run"
  kill "$old"
  while [ -d "/proc/$old" ]; do sleep 0.1; done
fi
rm -rf "$folder"

echo
"$program" scenario --out "$folder" --seed 7
echo
"$program" inspect --settings "$settings"

echo
echo "== starting the service"
"$program" serve --settings "$settings" >"$folder/service.log" 2>&1 &
service=$!
echo "$service" >"$pid_file"
for _ in $(seq 100); do
  [ -f "$folder/var/endpoints.json" ] && break
  [ -d "/proc/$service" ] || { cat "$folder/service.log" >&2; exit 1; }
  sleep 0.1
done
address=$(sed 's/.*"http":"\([^"]*\)".*/\1/' "$folder/var/endpoints.json")

echo "== most days through the drop folder: a finished file is renamed into $folder/var/drop"
total=$(find "$folder/closes" -name '*.csv' | wc -l)
for file in "$folder"/closes/*.csv; do
  name=$(basename "$file")
  cp "$file" "$folder/var/drop/.$name.part"
  mv "$folder/var/drop/.$name.part" "$folder/var/drop/$name"
done
taken=0
for _ in $(seq 1200); do
  now=$(find "$folder/var/drop/accepted" -name '*.csv' | wc -l)
  if [ "$now" != "$taken" ]; then taken=$now; echo "   $taken of $total months taken"; fi
  [ "$taken" = "$total" ] && break
  if [ -n "$(find "$folder/var/drop/refused" -type f)" ]; then cat "$folder"/var/drop/refused/*.reason.txt >&2; exit 1; fi
  [ -d "/proc/$service" ] || { tail -n 20 "$folder/service.log" >&2; exit 1; }
  sleep 0.1
done
[ "$taken" = "$total" ] || { echo "the service did not take the files in time; see $folder/service.log" >&2; exit 1; }

echo "== the last days through the socket"
"$program" feed --settings "$settings" "$folder"/last/*.json

for book in harbour meadow; do
  echo
  echo "== target of $book"
  "$program" target --settings "$settings" --book "$book"
done
echo "   (stale, because the invented market ends there and no closes came since)"
echo
echo "== the trade log of harbour: its last ten nights"
"$program" log --settings "$settings" --book harbour --limit 10
move=$("$program" log --settings "$settings" --book harbour --verdict move --limit 1 --json |
  sed -n 's/.*"rows":\[{"date":"\([0-9-]*\)".*/\1/p')
echo
echo "== one night's evidence: the last one that proposed a trade"
"$program" night --settings "$settings" --book harbour "$move"

echo
echo "nightweigh proposes; it never sends an order, and is no investment advice."
if $once; then
  kill "$service"
  wait "$service" || true
  rm -f "$pid_file"
  echo "The service was stopped. Its log: $folder/service.log"
else
  echo "The service runs:    http://$address/v1/books/harbour/target"
  echo "Look around:         $program log --settings $settings --book harbour --reasons"
  echo "Its log:             $folder/service.log"
  echo "Stop it:             kill $service"
fi
