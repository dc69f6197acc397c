package main

import (
	"flag"
	"syscall"
	"testing"
	"time"

	"tailbell/monitor/rehearse/ordeal"
)

var chaosThroughput = flag.Bool("chaos.throughput", false, "measure how fast one, two and three processes read a backlog")

// TestSharedThroughput lets one, two and three processes on this machine read the
// same backlog from three nodes. The machine binds before the processes do; the
// figures say what sharing costs, not what it brings.
//
//	go test ./cmd/tailbell -run TestSharedThroughput -chaos.throughput -timeout 1h -v
func TestSharedThroughput(t *testing.T) {
	if !*chaosThroughput {
		t.Skip("takes minutes of a machine with nothing else to do: -chaos.throughput")
	}
	for processes := 1; processes <= 3; processes++ {
		x := newChaos(t, processes, ordeal.Options{Days: 20, Sites: 100, Partitions: chaosPartitions})
		elements := 0
		for i := range x.plan.Messages {
			elements += len(x.plan.Messages[i].Elements)
		}
		from := time.Now()
		x.begin(1_000_000)
		for _, w := range x.workers {
			w.end(syscall.SIGTERM)
		}
		for x.pub.left() > 0 {
			idle(20 * time.Millisecond)
		}
		published := time.Since(from)
		x.stop()
		from = time.Now()
		for _, w := range x.workers {
			w.start()
		}
		for deadline := from.Add(10 * time.Minute); !x.quiet(); idle(20 * time.Millisecond) {
			if time.Now().After(deadline) {
				t.Fatal("it does not come to rest")
			}
		}
		took := time.Since(from)
		t.Logf("%d processes: %d messages with %d observations published and stored threefold in %v (%.0f messages a second), read and stored in %v (%.0f messages, %.0f observations a second), start and delivery of alerts included",
			processes, len(x.plan.Messages), elements, published.Round(time.Millisecond), float64(len(x.plan.Messages))/published.Seconds(),
			took.Round(time.Millisecond), float64(len(x.plan.Messages))/took.Seconds(), float64(elements)/took.Seconds())
		for _, w := range x.workers {
			w.end(syscall.SIGTERM)
		}
		for _, n := range x.nodes {
			n.kill()
		}
	}
}
