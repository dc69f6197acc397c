#!/usr/bin/env bash
# usage: cmd/tailbell/compare-benchmarks.sh OLD NEW PACKAGE BENCHMARK [ROUNDS]
# Runs the benchmarks of PACKAGE that match BENCHMARK in the commits OLD and NEW
# by turns (6 rounds), and compares them with benchstat. The working tree is left alone.
set -euo pipefail
[ $# -ge 4 ] || { sed -n 2,4p "$0" >&2; exit 2; }
old=$1 new=$2 package=$3 benchmark=$4 rounds=${5:-6}
cd "$(git rev-parse --show-toplevel)"
folder=$(mktemp -d)
clean() {
  for side in old new; do git worktree remove --force "$folder/$side" 2>/dev/null || true; done
  rm -rf "$folder"
}
trap clean EXIT
for side in old new; do
  git worktree add -q --detach "$folder/$side" "${!side}"
  (cd "$folder/$side" && go test -c -o "$folder/$side.test" "$package")
done
for _ in $(seq "$rounds"); do
  for side in old new; do
    (cd "$folder/$side/$package" && "$folder/$side.test" -test.run '^$' -test.bench "$benchmark" -test.benchtime 3x -test.benchmem) >> "$folder/$side.txt"
  done
done
go run golang.org/x/perf/cmd/benchstat@v0.0.0-20250813145418-2f7363a06fe1 "$folder/old.txt" "$folder/new.txt"
