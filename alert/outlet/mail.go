package outlet

import (
	"bytes"
	"context"
	"crypto/tls"
	"crypto/x509"
	"errors"
	"fmt"
	"net"
	netmail "net/mail"
	"os"
	"strconv"
	"strings"
	"time"

	"github.com/wneessen/go-mail"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/monitor/life"
)

// mailTimeout bounds one try from the connection to the server's last answer.
const mailTimeout = 30 * time.Second

// Mail delivers by SMTP to people: plain text and HTML, a picture, and a link
// to the alert on the page, where it can be acknowledged.
//
// The Message-ID is made of the steps' idempotency keys: it is the same at every
// try, so that a repeat can be told. Steps of one alert refer to its first, so
// that a reader puts them together.
type Mail struct {
	o      MailOptions
	sender *netmail.Address
	host   string
	port   int
	dialer net.Dialer
}

// MailOptions say where a Mail delivers.
type MailOptions struct {
	// Outlet is its part of the set-up; Deployment the deployment's name.
	Outlet     config.Outlet
	Deployment string
	// Page is the page's address, to which "/alerts/ID" is added; "" for none.
	Page string
	// Now tells when a message was sent.
	Now func() time.Time
}

// NewMail returns the outlet. It fails if the password or the authorities can't
// be read; they are read again at every delivery, so that they can be replaced.
func NewMail(o MailOptions) (*Mail, error) {
	host, port, err := net.SplitHostPort(o.Outlet.Mail.Server)
	if err != nil {
		return nil, fmt.Errorf("outlet %s: the server %q: %w", o.Outlet.Name, o.Outlet.Mail.Server, err)
	}
	number, err := strconv.Atoi(port)
	if err != nil {
		return nil, fmt.Errorf("outlet %s: the server %q: %w", o.Outlet.Name, o.Outlet.Mail.Server, err)
	}
	sender, err := netmail.ParseAddress(o.Outlet.Mail.From)
	if err != nil {
		return nil, fmt.Errorf("outlet %s: the sender: %w", o.Outlet.Name, err)
	}
	m := &Mail{o: o, sender: sender, host: host, port: number}
	if _, err := m.client(&mailLine{}); err != nil {
		return nil, fmt.Errorf("outlet %s: %w", o.Outlet.Name, err)
	}
	return m, nil
}

// Name names the outlet.
func (m *Mail) Name() string { return m.o.Outlet.Name }

// Deliver sends one step.
func (m *Mail) Deliver(ctx context.Context, n *life.Notice) error {
	picture, err := Picture(&n.Record, m.o.Outlet.Mail.Picture)
	if err != nil {
		return err
	}
	l := letter{notices: []*life.Notice{n}, picture: picture, form: m.o.Outlet.Mail.Picture, page: m.o.Page, outlet: m.Name(), deployment: m.o.Deployment}
	return m.send(ctx, &l, words.Subject(n), n.Key, n.Record.ID)
}

// DeliverTogether sends several steps as one message with a table.
func (m *Mail) DeliverTogether(ctx context.Context, notices []*life.Notice) error {
	l := letter{notices: notices, page: m.o.Page, outlet: m.Name(), deployment: m.o.Deployment}
	last := notices[len(notices)-1]
	key := fmt.Sprintf("%s.to.%s.of.%d", notices[0].Key, last.Key, len(notices))
	return m.send(ctx, &l, words.SubjectTogether(notices), key, "")
}

func (m *Mail) send(ctx context.Context, l *letter, subject, key, alert string) error {
	msg, err := m.message(l, subject, key, alert)
	if err != nil {
		return fmt.Errorf("writing message %s: %w", key, err)
	}
	ctx, cancel := context.WithTimeout(ctx, mailTimeout)
	defer cancel()
	var line mailLine
	defer line.close()
	defer context.AfterFunc(ctx, line.close)()
	client, err := m.client(&line)
	if err != nil {
		return err
	}
	session, err := client.DialToSMTPClientWithContext(ctx)
	if err == nil {
		err = client.SendWithSMTPClient(session, msg)
	}
	if err != nil {
		return fmt.Errorf("mail through %s: %w", m.o.Outlet.Mail.Server, plainError(err))
	}
	// The server has taken it: how the two part makes no difference.
	_ = client.CloseWithSMTPClient(session) //nolint:errcheck // see above
	return nil
}

// plainError takes line breaks and control characters out of what a server
// said, and cuts it.
func plainError(err error) error { return errors.New(printable(err.Error())) }

func printable(s string) string {
	s = strings.Join(strings.FieldsFunc(s, func(c rune) bool { return c < ' ' || c == 0x7f || c == ' ' }), " ")
	if r := []rune(s); len(r) > 300 {
		s = string(r[:300]) + "..."
	}
	return s
}

// client makes a client with the secrets as they now are. What they hold is in
// no error.
func (m *Mail) client(line *mailLine) (*mail.Client, error) {
	c := &m.o.Outlet.Mail
	secure := &tls.Config{ServerName: m.host, MinVersion: tls.VersionTLS12}
	if c.CA != "" {
		pem, err := os.ReadFile(c.CA)
		if err != nil {
			return nil, fmt.Errorf("the authorities: %w", err)
		}
		secure.RootCAs = x509.NewCertPool()
		if !secure.RootCAs.AppendCertsFromPEM(pem) {
			return nil, fmt.Errorf("the file of authorities %s holds no PEM certificate", c.CA)
		}
	}
	options := []mail.Option{
		mail.WithPort(m.port), mail.WithTimeout(mailTimeout), mail.WithTLSConfig(secure), mail.WithoutNoop(),
		mail.WithDialContextFunc(m.dial(line, secure, c.TLS)),
	}
	if c.TLS == config.StartTLS {
		options = append(options, mail.WithTLSPolicy(mail.TLSMandatory))
	} else {
		options = append(options, mail.WithTLSPolicy(mail.NoTLS)) // it is there already, or never
	}
	if c.User != "" {
		password, err := os.ReadFile(c.PasswordFile)
		if err != nil {
			return nil, fmt.Errorf("the password file: %w", err)
		}
		options = append(options, mail.WithSMTPAuthCustom(&signIn{
			user: c.User, password: strings.TrimRight(string(password), "\r\n"), host: m.host, clear: c.TLS == config.WithoutTLS,
		}))
	}
	return mail.NewClient(m.host, options...)
}

// message makes the message.
func (m *Mail) message(l *letter, subject, key, alert string) (*mail.Msg, error) {
	msg := mail.NewMsg(mail.WithNoDefaultUserAgent())
	msg.FromMailAddress(m.sender)
	if err := msg.To(m.o.Outlet.Mail.To...); err != nil {
		return nil, err
	}
	msg.Subject(subject)
	msg.SetDateWithValue(m.o.Now())
	msg.SetMessageIDWithValue(m.id(key))
	if alert != "" && key != life.Key(alert, 1) {
		first := "<" + m.id(life.Key(alert, 1)) + ">"
		msg.SetGenHeader(mail.HeaderInReplyTo, first)
		msg.SetGenHeader(mail.HeaderReferences, first)
	}
	msg.SetGenHeader("Auto-Submitted", "auto-generated") // RFC 3834
	html, err := l.html()
	if err != nil {
		return nil, err
	}
	msg.SetBodyString(mail.TypeTextPlain, l.text())
	msg.AddAlternativeString(mail.TypeTextHTML, html)
	if l.picture == nil {
		return msg, nil
	}
	if l.form == config.SVG {
		return msg, msg.AttachReader("counts.svg", bytes.NewReader(l.picture), mail.WithFileContentType("image/svg+xml"))
	}
	return msg, msg.EmbedReader(pictureName, bytes.NewReader(l.picture), mail.WithFileContentType("image/png"), mail.WithFileContentID("<"+pictureName+">"))
}

// pictureName names the picture within a message.
const pictureName = "counts.png"

// id makes a Message-ID of a key.
func (m *Mail) id(key string) string {
	domain := m.sender.Address[strings.LastIndexByte(m.sender.Address, '@')+1:]
	return key + "." + m.o.Deployment + "@" + domain
}
