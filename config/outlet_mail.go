package config

import (
	"net"
	"net/mail"
	"strconv"
)

// MailTLS says how the way to a mail server is kept from eavesdroppers.
type MailTLS int

// The ways to a mail server.
const (
	StartTLS   MailTLS = iota // in the clear until the server has agreed to TLS, which it must
	DirectTLS                 // TLS from the first byte
	WithoutTLS                // in the clear, on this machine only
)

// String returns the way as written in a set-up.
func (t MailTLS) String() string {
	switch t {
	case StartTLS:
		return "starttls"
	case DirectTLS:
		return "tls"
	case WithoutTLS:
		return "none"
	}
	return "unknown way"
}

// Picture is the form of the picture that goes with a message.
type Picture int

// The forms of a picture.
const (
	PNG Picture = iota
	SVG
	NoPicture
)

// String returns the form as written in a set-up.
func (p Picture) String() string {
	switch p {
	case PNG:
		return "png"
	case SVG:
		return "svg"
	case NoPicture:
		return "none"
	}
	return "unknown form"
}

// MailOutlet says how messages are sent.
type MailOutlet struct {
	// Server is the mail server, HOST:PORT.
	Server string
	TLS    MailTLS
	// CA is a PEM file of authorities to trust instead of the system's.
	CA string
	// User signs in with the password in PasswordFile; both empty for none.
	User         string
	PasswordFile string
	// From and To are addresses, with or without a name.
	From string
	To   []string
	// Picture is the form of the picture that goes with a message.
	Picture Picture
}

func (s section) readMail() MailOutlet {
	var m MailOutlet
	way, _ := s.word("tls", 0, StartTLS.String(), DirectTLS.String(), WithoutTLS.String())
	m.TLS = MailTLS(way)
	m.Server = s.readServer(m.TLS)
	m.CA = s.filePath("ca", "")
	m.User, _ = s.text("user", "")
	m.PasswordFile = s.filePath("password_file", "")
	s.pair("user", "password_file")
	m.From = s.readFrom()
	m.To = s.readTo()
	form, _ := s.word("picture", 0, PNG.String(), SVG.String(), NoPicture.String())
	m.Picture = Picture(form)
	return m
}

func (s section) readServer(way MailTLS) string {
	server, sound := s.text("server", "")
	if !s.has("server") {
		s.fault("server", "is missing", `write the mail server and its port, e.g. "mail.example.org:587"`)
		return ""
	}
	if !sound {
		return ""
	}
	host, port, err := net.SplitHostPort(server)
	if n, portErr := strconv.ParseUint(port, 10, 16); err != nil || portErr != nil || n == 0 || host == "" {
		s.fault("server", strconv.Quote(server)+" is no server and port", `write e.g. "mail.example.org:587"`)
		return ""
	}
	if way == WithoutTLS && !isLoopback(host) {
		s.fault("tls", "would send alerts in the clear over a network", `write "starttls" or "tls"`)
	}
	return server
}

func (s section) readFrom() string {
	from, sound := s.text("from", "")
	switch _, err := mail.ParseAddress(from); {
	case !s.has("from"):
		s.fault("from", "is missing: who do the messages come from?", `write e.g. from = "Tailbell <tailbell@example.org>"`)
	case sound && err != nil:
		s.fault("from", strconv.Quote(from)+" is no mail address", `write e.g. "Tailbell <tailbell@example.org>"`)
	}
	return from
}

func (s section) readTo() []string {
	items, given := s.list("to", 50)
	if !given {
		s.fault("to", "is missing: whom are the messages for?", `write e.g. to = ["ward-lead@example.org"]`)
	}
	to := s.texts("to", items)
	for i, n := range items {
		if _, err := mail.ParseAddress(n.text); n.kind == textKind && n.text != "" && err != nil {
			s.add(n, s.item("to", i), strconv.Quote(n.text)+" is no mail address", `write e.g. "ward-lead@example.org"`)
		}
	}
	return to
}
