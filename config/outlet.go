package config

import (
	"fmt"
	"net"
	"net/url"
	"slices"
	"strings"
	"time"
)

// OutletKind says how an outlet delivers.
type OutletKind int

// The kinds of outlet.
const (
	Webhook OutletKind = iota // a signed HTTP POST of every step
	Mail                      // a message to people, by SMTP
	Command                   // a program on this machine, JSON on its standard input
)

// String returns the kind as written in a set-up.
func (k OutletKind) String() string {
	switch k {
	case Webhook:
		return "webhook"
	case Mail:
		return "mail"
	case Command:
		return "command"
	}
	return "unknown kind"
}

// Outlet is a way out for the steps of alerts, beside the bus and the terminal.
type Outlet struct {
	// Name names the outlet and its queue.
	Name string
	Kind OutletKind
	// Told says of which steps the outlet is told.
	Told Told
	// URL is where steps are posted: https, or http on this machine. SecretFile
	// holds the secrets for signing, one a line. For Webhook.
	URL        string
	SecretFile string
	// Mail says how messages are sent; for Mail.
	Mail MailOutlet
	// Command is the program and its arguments, which no shell reads, and
	// TimeLimit how long it may take; for Command.
	Command   []string
	TimeLimit time.Duration
}

const (
	outletPlace = "[[outlet]]"
	maxOutlets  = 32
)

// builtInOutlets are names that a set-up can't give.
var builtInOutlets = []string{"bus", "terminal"}

// keysOfKind are the keys that belong to outlets of one kind alone.
var keysOfKind = map[OutletKind][]string{
	Webhook: {"url", "secret_file"},
	Mail:    {"server", "tls", "ca", "user", "password_file", "from", "to", "picture"},
	Command: {"command", "time_limit"},
}

func readOutlets(top section, indicators []Indicator) []Outlet {
	var all []Outlet
	names := map[string]string{}
	for _, t := range top.tables("outlet", maxOutlets) {
		t.strict(outletPlace)
		var o Outlet
		var sound bool
		o.Name, sound = t.plainName("name", 64)
		if sound && slices.Contains(builtInOutlets, o.Name) {
			t.fault("name", "is that of an outlet that is always there", "give it another name")
		}
		if other, taken := names[o.Name]; sound && taken {
			t.fault("name", "is that of "+other+" too", "give each outlet its own name: its queue goes by it")
		}
		names[o.Name] = t.path
		kind, sound := t.word("kind", 0, "webhook", "mail", "command")
		o.Kind = OutletKind(kind)
		if sound {
			t.readOutletKind(&o)
		}
		o.Told = t.readTold(o.Kind, indicators)
		all = append(all, o)
	}
	return all
}

// readOutletKind reads the keys of the outlet's own kind, and refuses those of
// another.
func (s section) readOutletKind(o *Outlet) {
	for _, kind := range []OutletKind{Webhook, Mail, Command} {
		for _, k := range keysOfKind[kind] {
			if kind != o.Kind && s.has(k) {
				s.fault(k, "belongs to outlets of kind "+kind.String()+", and this one is of kind "+o.Kind.String(), "leave it out")
			}
		}
	}
	switch o.Kind {
	case Webhook:
		o.URL = s.readOutletURL()
		o.SecretFile = s.filePath("secret_file", "")
		if !s.has("secret_file") {
			s.fault("secret_file", "is missing: steps are signed", `name a file that holds "whsec_" and then 24 to 64 random bytes in base64`)
		}
	case Mail:
		o.Mail = s.readMail()
	case Command:
		o.Command = s.readCommand()
		o.TimeLimit, _ = s.duration("time_limit", 30*time.Second, time.Second, 10*time.Minute)
	}
}

// readCommand returns the program and its arguments.
func (s section) readCommand() []string {
	items, given := s.list("command", 50)
	if !given {
		s.fault("command", "is missing", `write the program and its arguments, e.g. ["/usr/local/bin/ring", "--ward"]`)
	}
	words := s.texts("command", items)
	if len(words) > 0 && !strings.Contains(words[0], "/") {
		s.fault("command", fmt.Sprintf("%q is no path: programs are not searched for", words[0]), "write the whole path, or ./ and a name beside the set-up")
	}
	return words
}

// texts returns the texts of a list, none of them empty or with control
// characters.
func (s section) texts(name string, items []*node) []string {
	var words []string
	for i, n := range items {
		switch key := s.item(name, i); {
		case n.kind != textKind:
			s.wrongKind(n, key, textKind)
		case n.text == "" || strings.ContainsFunc(n.text, func(c rune) bool { return c < ' ' || c == 0x7f }):
			s.add(n, key, "is empty or has control characters in it", "")
		default:
			words = append(words, n.text)
		}
	}
	return words
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

// checkRemind sees that reminders go to outlets that there are.
func checkRemind(top section, s *Setup) {
	for _, t := range top.given("indicator") {
		n, given, ok := t.get("remind_to", textKind)
		if !given || !ok || slices.Contains(builtInOutlets, n.text) ||
			slices.ContainsFunc(s.Outlets, func(o Outlet) bool { return o.Name == n.text }) {
			continue
		}
		t.fault("remind_to", fmt.Sprintf("%q is the name of no outlet", n.text), "name an [[outlet]] of this set-up")
	}
}

// given returns the tables of a list that was read before, whose faults were
// told then.
func (s section) given(name string) []section {
	n := s.node.fields[name]
	switch {
	case n == nil:
		return nil
	case n.kind == tableKind:
		return []section{{s.collector, n, s.item(name, 0)}}
	}
	var all []section
	for i, item := range n.items {
		if item.kind == tableKind {
			all = append(all, section{s.collector, item, s.item(name, i)})
		}
	}
	return all
}
