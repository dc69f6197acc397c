package config

import (
	"net"
	"net/url"
	"strconv"
	"strings"
)

// Page says where the page is served, and to whom.
type Page struct {
	// Listen is the address, HOST:PORT; empty where no page is served.
	Listen string
	// URL is the address under which people reach the page, without a slash at
	// its end; empty where it is that of Listen. Links in messages begin with it.
	URL string
	// Users is the file of those who may look and act; empty where whoever
	// reaches the address may, which is on this machine only.
	Users string
	// Cert and Key are PEM files of the page's certificate and its key; empty
	// for no TLS, which is on this machine only.
	Cert string
	Key  string
}

// Served reports whether there is a page.
func (p Page) Served() bool { return p.Listen != "" }

// Address returns the address under which people reach the page, without a
// slash at its end; empty where there is none.
func (p Page) Address() string {
	switch {
	case p.URL != "" || !p.Served():
		return p.URL
	case p.Cert != "":
		return "https://" + p.Listen
	}
	return "http://" + p.Listen
}

const (
	pagePlace = "[page]"
	// pageListen is where a page is served unless told otherwise.
	pageListen = "127.0.0.1:4871"
)

// readPage reads the table of the page; without one there is none.
func (s section) readPage(given bool) Page {
	if !given {
		return Page{}
	}
	s.strict(pagePlace)
	p := Page{Users: s.filePath("users", ""), Cert: s.filePath("cert", ""), Key: s.filePath("key", "")}
	s.pair("cert", "key")
	var near bool
	p.Listen, near = s.readListen()
	p.URL = s.readPageURL(near)
	return p
}

// readListen returns the address and whether it is on this machine only. One
// elsewhere needs TLS and users.
func (s section) readListen() (address string, near bool) {
	address, sound := s.text("listen", pageListen)
	if !sound {
		return "", true
	}
	host, port, err := net.SplitHostPort(address)
	number, portErr := strconv.ParseUint(port, 10, 16)
	switch {
	case err != nil || portErr != nil || (host != "" && host != "localhost" && net.ParseIP(host) == nil):
		s.fault("listen", strconv.Quote(address)+" is no address to listen at", `write an IP address and a port, e.g. "`+pageListen+`", or "0.0.0.0:443" for every network of this machine`)
		return "", true
	case number == 0 && !isLoopback(host):
		s.fault("listen", "has no port that people could find", `write e.g. ":4871"`)
	}
	if isLoopback(host) {
		return address, true
	}
	if ip := net.ParseIP(host); (ip == nil || ip.IsUnspecified()) && !s.has("url") {
		s.fault("url", "is missing: listen names every network of this machine, so it doesn't say how people reach the page", `write e.g. url = "https://tailbell.example.org"`)
	}
	for _, need := range []struct{ key, why, mend string }{
		{"cert", "is missing: at this address the page would cross a network in the clear", "name the PEM files of a certificate and its key, cert and key, or listen at " + pageListen},
		{"users", "is missing: at this address anybody could look and act", `name a file, and let "tailbell user add" write it, or listen at ` + pageListen},
	} {
		if !s.has(need.key) {
			s.fault(need.key, need.why, need.mend)
		}
	}
	return address, false
}

// readPageURL returns the address under which people reach the page. A page
// that is reached from elsewhere, such as through a proxy on this machine,
// needs TLS on the way and users, too.
func (s section) readPageURL(near bool) string {
	n, given, ok := s.get("url", textKind)
	if !given || !ok {
		return ""
	}
	u, err := url.Parse(n.text)
	switch {
	case err != nil || u.Hostname() == "" || (u.Scheme != "https" && u.Scheme != "http"):
		// The text is not repeated: it may hold a password.
		s.fault("url", "is no address of a page", `write e.g. "https://tailbell.example.org"`)
	case u.User != nil:
		s.fault("url", "holds a user or a password, which must not stand in a set-up", `write e.g. "https://tailbell.example.org"`)
	case strings.Trim(u.Path, "/") != "" || u.RawQuery != "" || u.Fragment != "":
		s.fault("url", "has more than a host and a port, and the page is served at the top of its host", `write e.g. "https://tailbell.example.org"`)
	case u.Scheme == "http" && (!near || s.has("cert") || !isLoopback(u.Hostname())):
		s.fault("url", "would be reached in the clear", "write https://")
	case near && !isLoopback(u.Hostname()) && !s.has("users"):
		s.fault("users", "is missing: under "+u.Host+" anybody could look and act", `name a file, and let "tailbell user add" write it`)
	default:
		return strings.TrimRight(n.text, "/")
	}
	return ""
}
