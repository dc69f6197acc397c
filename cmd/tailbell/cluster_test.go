package main

import (
	"bytes"
	"context"
	"fmt"
	"net"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"tailbell/ingest/bus"
	"tailbell/ingest/claim"

	"github.com/nats-io/nats.go/jetstream"
)

const clusterText = `name = "quillmere"
folder = "data"
partitions = 8
[bus]
url = %q
user = "tailbell"
password_file = "password"
max_bytes = "64MiB"
share = %v
claim = "1s"
copy_every = "5s"
[[indicator]]
name = "fall"
noun = "falls"
series = ["*/*/fall"]
unit = "bed-days"
per = 1000
every = "1d"
events = "counted"
settle = "1d"
horizon = "60d"
windows = ["7d"]
tails = ["upper"]
p_limit = 0.01
quiet = 3
[indicator.baseline]
kind = "known"
rate = 6
`

// cluster are processes that work on one bus of somebody else's.
type cluster struct {
	t        *testing.T
	address  string
	services []*service
	bucket   *bus.Bucket
	bus      *bus.Bus
}

func newCluster(t *testing.T, members int, share bool) *cluster {
	t.Helper()
	server, address := newBusProcess(t, filepath.Join(t.TempDir(), "bus"))
	server.start()
	t.Cleanup(server.kill)
	for deadline := time.Now().Add(patience); ; {
		conn, err := net.Dial("tcp", address)
		if err == nil {
			if err := conn.Close(); err != nil {
				t.Error(err)
			}
			break
		}
		if time.Now().After(deadline) {
			t.Fatal(err)
		}
	}
	c := &cluster{t: t, address: address}
	for range members {
		path := filepath.Join(t.TempDir(), "tailbell.toml")
		if err := os.WriteFile(path, fmt.Appendf(nil, clusterText, "nats://"+address, share), 0o600); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(filepath.Dir(path), "password"), []byte(busPassword), 0o600); err != nil {
			t.Fatal(err)
		}
		c.services = append(c.services, newService(t, path))
	}
	return c
}

// look connects to the bus, whose streams are there by now.
func (c *cluster) look() {
	c.t.Helper()
	c.bus = c.services[0].dial()
	var err error
	if c.bucket, err = c.bus.Claims(c.t.Context()); err != nil {
		c.t.Fatal(err)
	}
}

// owners returns how many partitions each member owns.
func (c *cluster) owners() map[string]int {
	c.t.Helper()
	rows, err := claim.Look(c.t.Context(), c.bucket)
	if err != nil {
		c.t.Fatal(err)
	}
	owners := map[string]int{}
	for _, r := range rows {
		if r.Owner != "" {
			owners[r.Owner]++
		}
	}
	return owners
}

// evenly waits until so many members own even shares.
func (c *cluster) evenly(members int) {
	c.t.Helper()
	c.services[0].await("even shares", func() bool {
		owners, sum, most := c.owners(), 0, 0
		for _, n := range owners {
			sum += n
			most = max(most, n)
		}
		return len(owners) == members && sum == 8 && most == (8+members-1)/members
	})
}

// feed feeds ten days of falls in a ward of each of so many sites, from a number
// on; every ward rings once.
func (c *cluster) feed(from, sites int) {
	c.t.Helper()
	var b bytes.Buffer
	b.WriteString("series,start,end,events,exposure[bed-days]\n")
	first := time.Now().UTC().Truncate(24*time.Hour).AddDate(0, 0, -30)
	for i := range 10 {
		day := first.AddDate(0, 0, i)
		for site := range sites {
			fmt.Fprintf(&b, "site-%d/ward-1/fall,%s,%s,1,20\n", from+site, day.Format(time.RFC3339), day.AddDate(0, 0, 1).Format(time.RFC3339))
		}
	}
	path := filepath.Join(c.t.TempDir(), "falls.csv")
	if err := os.WriteFile(path, b.Bytes(), 0o600); err != nil {
		c.t.Fatal(err)
	}
	says(c.t, 0, nil, "feed", "--config", c.services[0].path, path)
}

// published is what one message of the stream of alerts says.
type published struct {
	epoch, row uint64
	mark       bool
	key        string
}

// alerts returns by partition all that was published.
func (c *cluster) alerts() map[string][]published {
	c.t.Helper()
	nc, err := visit("", c.address)
	if err != nil {
		c.t.Fatal(err)
	}
	defer nc.Close()
	js, err := jetstream.New(nc)
	if err != nil {
		c.t.Fatal(err)
	}
	ctx, cancel := context.WithTimeout(c.t.Context(), patience)
	defer cancel()
	s, err := js.Stream(ctx, "quillmere-alerts")
	if err != nil {
		c.t.Fatal(err)
	}
	all := map[string][]published{}
	for n := s.CachedInfo().State.FirstSeq; n > 0 && n <= s.CachedInfo().State.LastSeq; n++ {
		m, err := s.GetMsg(ctx, n)
		if err != nil {
			c.t.Fatal(err)
		}
		p := published{key: m.Header.Get("Nats-Msg-Id"), mark: strings.HasSuffix(m.Subject, ".owner")}
		for name, into := range map[string]*uint64{bus.EpochHeader: &p.epoch, bus.RowHeader: &p.row} {
			if *into, err = strconv.ParseUint(m.Header.Get(name), 10, 64); err != nil {
				c.t.Fatalf("%s: %v", m.Subject, err)
			}
		}
		part := strings.Split(m.Subject, ".")[2]
		all[part] = append(all[part], p)
	}
	return all
}

// steps counts the steps that were published.
func (c *cluster) steps() (n int) {
	for _, list := range c.alerts() {
		for _, p := range list {
			if !p.mark {
				n++
			}
		}
	}
	return n
}

// check checks that no step is doubled or missing, and that epochs grow.
func (c *cluster) check() {
	c.t.Helper()
	for part, list := range c.alerts() {
		var row, epoch uint64
		keys := map[string]bool{}
		for _, p := range list {
			switch {
			case p.mark && (p.epoch <= epoch || p.row != row):
				c.t.Errorf("partition %s: the mark %+v after row %d of epoch %d", part, p, row, epoch)
			case !p.mark && (p.epoch != epoch || p.row != row+1 || keys[p.key]):
				c.t.Errorf("partition %s: %+v after row %d of epoch %d", part, p, row, epoch)
			}
			row, epoch, keys[p.key] = p.row, p.epoch, true
		}
	}
}
