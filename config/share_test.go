package config

import (
	"strings"
	"testing"
	"time"
)

const shareBus = `
[bus]
url = "nats://bus.example.org:4222"
replicas = 3
`

func TestShareKeys(t *testing.T) {
	rest := plain("", "kind = \"known\"\nrate = 2\n")
	got := mustParse(t, strings.Replace(rest, "[[indicator]]", shareBus+"share = true\nclaim = \"5s\"\ncopy_every = \"2m\"\n[[indicator]]", 1)).Bus
	if !got.Share || got.Claim != 5*time.Second || got.CopyEvery != 2*time.Minute {
		t.Errorf("%+v", got)
	}
	got = mustParse(t, strings.Replace(rest, "[[indicator]]", shareBus+"[[indicator]]", 1)).Bus
	if got.Share || got.Claim != DefaultClaim || got.CopyEvery != DefaultCopyEvery {
		t.Errorf("defaults: %+v", got)
	}
	for lines, want := range map[string]string{
		"[bus]\nshare = true\n":                   "bus.share: means nothing for the embedded bus",
		"[bus]\nclaim = \"3s\"\n":                 "bus.claim: means nothing for the embedded bus",
		shareBus + "share = \"yes\"\n":            "bus.share",
		shareBus + "claim = \"500ms\"\n":          "bus.claim",
		shareBus + "claim = \"2m\"\n":             `bus.claim: "2m" is not between 1s and 1m`,
		shareBus + "copy_every = \"1s\"\n":        `bus.copy_every: "1s" is not between 5s and 1d`,
		shareBus + "share = true\nshares = 3\n\n": "bus.shares: is no key of [bus]",
	} {
		_, err := Parse([]byte(strings.Replace(rest, "[[indicator]]", lines+"[[indicator]]", 1)), "set-up")
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%q: %v, want %q", lines, err, want)
		}
	}
}
