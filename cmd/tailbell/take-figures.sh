#!/usr/bin/env bash
# Takes the figures of PERFORMANCE.md, the most important first, on a machine with
# nothing else to do. On two cores it takes about 25 minutes, ten of them for the
# soak; SOAK=2m shortens that, and ONLY=TEXT takes only the parts whose names
# contain the text:
#
#   cmd/tailbell/take-figures.sh
#   SOAK=2m ONLY='million' cmd/tailbell/take-figures.sh
#
# Rows go to standard output, everything that was said to the file in LOG.
set -euo pipefail
cd "$(dirname "$0")/../.."
soak=${SOAK:-10m} only=${ONLY:-} log=${LOG:-$(mktemp --suffix=.log)}
bin=$(mktemp -d)
trap 'rm -rf "$bin"' EXIT
go test -c -o "$bin/cmd" ./cmd/tailbell
go test -c -o "$bin/monitor" ./monitor
go test -c -o "$bin/partition" ./monitor/partition
echo "Taken $(date -u +%F) on $(nproc) cores, $(uname -sm), $(go env GOVERSION); load $(cut -d' ' -f1-3 /proc/loadavg). All that was said: $log" >&2

# part NAME FOLDER COMMAND...: runs the command in the folder and prints its rows.
part() {
	local name=$1 folder=$2 began=$SECONDS out
	shift 2
	[[ $name == *"$only"* ]] || return 0
	out=$(mktemp -p "$bin")
	(cd "$folder" && "$@") >"$out" 2>&1 || echo "| $name | failed, see $log |"
	{ echo "== $name"; cat "$out"; } >>"$log"
	awk -v name="$name" '
		sub(/^.*figure \| /, "") { print "| " name " | " $0; next }
		/^Benchmark/ && NF > 3 {
			row = $1
			for (i = 3; i < NF; i += 2) row = row ", " $i " " $(i + 1)
			print "| " name " | " row " |"
		}' "$out"
	echo "   $name: $((SECONDS - began)) s" >&2
}

yard() { part "yardstick $1" cmd/tailbell "$bin/cmd" -test.run 'TestYardstick$' -test.v -test.timeout 0 -yardstick -yardstick-only "$1" -yardstick-rounds "$2"; }
bench() { part "$1" monitor "$bin/monitor" -test.run '^$' -test.benchmem -test.bench "$1" -test.benchtime "$2"; }

yard 'embedded 10000 series, 1 a message' 3
part million monitor "$bin/monitor" -test.run 'TestMillion$' -test.v -test.timeout 0 -million 1000000 -million-minutes 12
yard 'embedded 10000 series, 100 a message' 3
yard 'idle' 1
part start monitor/partition "$bin/partition" -test.run '^$' -test.bench 'Start/series=100000' -test.benchtime 5x
yard 'embedded 100000 series, 100 a message' 2
bench 'Look$' 2s
bench 'Partitions' 5s
bench 'Apply/series=20000' 2s
part 'quiet series' monitor "$bin/monitor" -test.run 'TestMillion$' -test.v -million 100000 -million-minutes 3
yard 'embedded 1000 series' 2
yard 'TCP 10000 series, 100 a message' 2
yard 'TCP 10000 series, 1 a message' 2
yard 'embedded 100000 series, 1 a message' 1
part soak cmd/tailbell "$bin/cmd" -test.run 'TestSoak$' -test.v -test.timeout 0 -soak "$soak" -soak-rate 100000
