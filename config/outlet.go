package config

import (
	"net"
	"net/url"
	"slices"
)

// OutletKind says how an outlet delivers.
type OutletKind int

// The kinds of outlet.
const (
	Webhook OutletKind = iota // a signed HTTP POST of every step
)

// String returns the kind as written in a set-up.
func (k OutletKind) String() string {
	if k == Webhook {
		return "webhook"
	}
	return "unknown kind"
}

// Outlet is a way out for the steps of alerts, beside the bus and the terminal.
type Outlet struct {
	// Name names the outlet and its queue.
	Name string
	Kind OutletKind
	// URL is where steps are posted: https, or http on this machine.
	URL string
	// SecretFile holds the secrets for signing, one a line.
	SecretFile string
}

const (
	outletPlace = "[[outlet]]"
	maxOutlets  = 32
)

// builtInOutlets are names that a set-up can't give.
var builtInOutlets = []string{"bus", "terminal"}

func readOutlets(top section) []Outlet {
	var all []Outlet
	names := map[string]string{}
	for _, t := range top.tables("outlet", maxOutlets) {
		t.strict(outletPlace)
		o := Outlet{Kind: Webhook}
		var sound bool
		o.Name, sound = t.plainName("name", 64)
		if sound && slices.Contains(builtInOutlets, o.Name) {
			t.fault("name", "is that of an outlet that is always there", "give it another name")
		}
		if other, taken := names[o.Name]; sound && taken {
			t.fault("name", "is that of "+other+" too", "give each outlet its own name: its queue goes by it")
		}
		names[o.Name] = t.path
		t.word("kind", 0, "webhook")
		o.URL = t.readOutletURL()
		o.SecretFile = t.filePath("secret_file", "")
		if !t.has("secret_file") {
			t.fault("secret_file", "is missing: steps are signed", `name a file that holds "whsec_" and then 24 to 64 random bytes in base64`)
		}
		all = append(all, o)
	}
	return all
}

func (s section) readOutletURL() string {
	n, given, ok := s.get("url", textKind)
	if !given {
		s.fault("url", "is missing", `write e.g. "https://hooks.example.org/alerts"`)
		return ""
	}
	if !ok {
		return ""
	}
	u, err := url.Parse(n.text)
	switch {
	case err != nil || u.Host == "" || (u.Scheme != "https" && u.Scheme != "http"):
		// The text is not repeated: it may hold a password.
		s.fault("url", "is no address of a web service", `write e.g. "https://hooks.example.org/alerts"`)
	case u.User != nil:
		s.fault("url", "holds a user or a password, which must not stand in a set-up", "steps are signed with the secret of secret_file")
	case u.Scheme == "http" && !isLoopback(u.Hostname()):
		s.fault("url", "would send alerts in the clear over a network", "write https://")
	default:
		return n.text
	}
	return ""
}

func isLoopback(host string) bool {
	ip := net.ParseIP(host)
	return host == "localhost" || (ip != nil && ip.IsLoopback())
}
