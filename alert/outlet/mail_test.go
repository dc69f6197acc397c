package outlet_test

import (
	"bytes"
	"encoding/base64"
	"io"
	"mime"
	"mime/multipart"
	"mime/quotedprintable"
	"net/mail"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"tailbell/alert/outlet"
	"tailbell/alert/outlet/outlettest"
	"tailbell/config"
	"tailbell/monitor/life"
)

var noon = time.Date(2026, 3, 4, 11, 0, 0, 0, time.UTC)

func writeFile(t *testing.T, name, text string, mode os.FileMode) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), name)
	if err := os.WriteFile(path, []byte(text), mode); err != nil {
		t.Fatal(err)
	}
	return path
}

// mailOutlet is an outlet of the set-up that delivers to the server.
func mailOutlet(t *testing.T, s *mailServer) config.Outlet {
	t.Helper()
	way := config.StartTLS
	if s.direct {
		way = config.DirectTLS
	}
	return config.Outlet{
		Name: "post", Kind: config.Mail,
		Mail: config.MailOutlet{
			Server: s.address(), TLS: way, CA: s.ca, User: mailUser, PasswordFile: writeFile(t, "password", mailPassword+"\n", 0o600),
			From: "Tailbell <tailbell@quillmere.example>", To: []string{"ward-3@quillmere.example", "Infection Control <ic@quillmere.example>"},
		},
	}
}

func newMail(t *testing.T, o config.Outlet) *outlet.Mail {
	t.Helper()
	m, err := outlet.NewMail(outlet.MailOptions{
		Outlet: o, Deployment: "quillmere", Page: "https://tailbell.quillmere.example", Now: func() time.Time { return noon },
	})
	if err != nil {
		t.Fatal(err)
	}
	return m
}

func TestMailConforms(t *testing.T) {
	for _, direct := range []bool{false, true} {
		s := newMailServer(t, direct)
		if err := outlettest.Check(t.Context(), newMail(t, mailOutlet(t, s)), s, mailPassword); err != nil {
			t.Errorf("direct TLS %v: %v", direct, err)
		}
		for _, l := range s.letters() {
			if !l.secure || !l.checked || len(l.to) != 2 {
				t.Errorf("direct TLS %v: a message %s", direct, l)
			}
		}
	}
}

// part returns the first part of a message of a media type, decoded.
func part(t *testing.T, header mail.Header, body io.Reader, want string) ([]byte, error) {
	t.Helper()
	kind, params, err := mime.ParseMediaType(header.Get("Content-Type"))
	if err != nil {
		return nil, err
	}
	if !strings.HasPrefix(kind, "multipart/") {
		if kind != want {
			return nil, errNoPart
		}
		switch header.Get("Content-Transfer-Encoding") {
		case "quoted-printable":
			body = quotedprintable.NewReader(body)
		case "base64":
			body = base64.NewDecoder(base64.StdEncoding, body)
		}
		return io.ReadAll(body)
	}
	parts := multipart.NewReader(body, params["boundary"])
	for {
		p, err := parts.NextRawPart()
		if err != nil {
			return nil, errNoPart
		}
		if got, err := part(t, mail.Header(p.Header), p, want); err == nil {
			return got, nil
		}
	}
}

func partOf(t *testing.T, data []byte, want string) string {
	t.Helper()
	m, err := mail.ReadMessage(bytes.NewReader(data))
	if err != nil {
		t.Fatal(err)
	}
	got, err := part(t, m.Header, m.Body, want)
	if err != nil {
		t.Errorf("%s: %v", want, err)
	}
	return strings.ReplaceAll(string(got), "\r\n", "\n")
}

func plainOf(t *testing.T, data []byte) string {
	t.Helper()
	return partOf(t, data, "text/plain")
}

// TestMailSays looks at one message: its headers, its sentences, its link, its
// picture, and what is not in it.
func TestMailSays(t *testing.T) {
	s := newMailServer(t, false)
	m := newMail(t, mailOutlet(t, s))
	n := outlettest.Step("ward-3", life.StepWorsened)
	n.Record.Series = "quillmere-east/<b>ward-3\"/line-infection" // no set-up lets it pass; the form must not care
	if err := m.Deliver(t.Context(), n); err != nil {
		t.Fatal(err)
	}
	data := s.letters()[0].data
	msg, err := mail.ReadMessage(bytes.NewReader(data))
	if err != nil {
		t.Fatal(err)
	}
	subject, err := new(mime.WordDecoder).DecodeHeader(msg.Header.Get("Subject"))
	if err != nil {
		t.Fatal(err)
	}
	for name, want := range map[string]string{
		"Message-Id": "<award3.2.quillmere@quillmere.example>", "References": "<award3.1.quillmere@quillmere.example>",
		"Auto-Submitted": "auto-generated", "Date": "Wed, 04 Mar 2026 11:00:00 +0000",
	} {
		if got := msg.Header.Get(name); got != want {
			t.Errorf("%s: %q, want %q", name, got, want)
		}
	}
	if want := "Worsened: 4 line infections, about 1.1 usual"; !strings.HasPrefix(subject, want) {
		t.Errorf("subject %q", subject)
	}
	text, html := plainOf(t, data), partOf(t, data, "text/html")
	for _, want := range []string{
		"4 line infections in the 28 days to 3 March 2026", "p = 0.026", "https://tailbell.quillmere.example/alerts/award3", "Silence is no proof of",
		"tailbell exact --events 4",
	} {
		if !strings.Contains(strings.Join(strings.Fields(text), " "), want) {
			t.Errorf("the text lacks %q:\n%s", want, text)
		}
		if !strings.Contains(html, want) {
			t.Errorf("the HTML lacks %q:\n%s", want, html)
		}
	}
	if strings.Contains(html, "<b>") || strings.Contains(html, "<script") {
		t.Errorf("what came from outside is no text:\n%s", html)
	}
	if png := partOf(t, data, "image/png"); !strings.HasPrefix(png, "\x89PNG") {
		t.Error("no picture")
	}
}

// TestMailKeepsOut sees what a server is not told, and that no error shows the
// password.
func TestMailKeepsOut(t *testing.T) {
	step := outlettest.Step("ward-3", life.StepOpened)
	for name, c := range map[string]struct {
		change func(*mailServer, *config.Outlet)
		want   string
	}{
		"no STARTTLS":       {func(s *mailServer, _ *config.Outlet) { s.set(func() { s.mu.noTLS = true }) }, "STARTTLS"},
		"another authority": {func(_ *mailServer, o *config.Outlet) { o.Mail.CA = "" }, "certificate"},
		"wrong password": {func(_ *mailServer, o *config.Outlet) {
			o.Mail.PasswordFile = writeFile(t, "wrong", "hunter2-wrong", 0o600)
		}, "535"},
		"a recipient refused": {func(s *mailServer, _ *config.Outlet) { s.set(func() { s.mu.refuse = "ic@" }) }, "550"},
	} {
		t.Run(name, func(t *testing.T) {
			s := newMailServer(t, false)
			o := mailOutlet(t, s)
			c.change(s, &o)
			err := newMail(t, o).Deliver(t.Context(), step)
			if err == nil || !strings.Contains(err.Error(), c.want) {
				t.Errorf("%v, want %q", err, c.want)
			}
			if err != nil && (strings.Contains(err.Error(), "hunter2") || strings.ContainsRune(err.Error(), '\x1b')) {
				t.Errorf("the error shows what it must not: %q", err)
			}
			if got := s.letters(); len(got) > 0 {
				t.Errorf("it was sent all the same: %s", got[0])
			}
		})
	}
}

func TestMailNeedsItsFiles(t *testing.T) {
	s := newMailServer(t, false)
	for want, change := range map[string]func(*config.Outlet){
		"password file": func(o *config.Outlet) { o.Mail.PasswordFile = "/nowhere/password" },
		"authorities":   func(o *config.Outlet) { o.Mail.CA = "/nowhere/ca.pem" },
		"no PEM":        func(o *config.Outlet) { o.Mail.CA = writeFile(t, "ca", "hunter2", 0o600) },
	} {
		o := mailOutlet(t, s)
		change(&o)
		_, err := outlet.NewMail(outlet.MailOptions{Outlet: o, Now: time.Now})
		if err == nil || !strings.Contains(err.Error(), want) || strings.Contains(err.Error(), "hunter2") {
			t.Errorf("%s: %v", want, err)
		}
	}
}
