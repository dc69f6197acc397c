package bus

import (
	"fmt"
	"net"
	"net/url"
	"os"
	"strings"

	"tailbell/config"

	"github.com/nats-io/nats.go"
)

// remoteOptions turn the set-up's account and TLS files into options of a
// connection. Files are read here, so that a missing one is named at once.
func remoteOptions(c config.Bus) ([]nats.Option, error) {
	var opts []nats.Option
	if c.Credentials != "" {
		if _, err := os.Stat(c.Credentials); err != nil {
			return nil, fmt.Errorf("the credentials file of the bus: %w", err)
		}
		opts = append(opts, nats.UserCredentials(c.Credentials))
	}
	if c.User != "" {
		password, err := readPassword(c.PasswordFile)
		if err != nil {
			return nil, err
		}
		opts = append(opts, nats.UserInfoHandler(func() (string, string) {
			// Read again at every connect, so that a changed password is
			// taken; while the file is being replaced the last one stands.
			if p, err := readPassword(c.PasswordFile); err == nil {
				password = p
			}
			return c.User, password
		}))
		if !onLoopback(c.URL) {
			opts = append(opts, nats.Secure()) // a password goes over TLS only
		}
	}
	if c.CA != "" {
		if _, err := os.Stat(c.CA); err != nil {
			return nil, fmt.Errorf("the CA file of the bus: %w", err)
		}
		opts = append(opts, nats.RootCAs(c.CA))
	}
	if c.Cert != "" || c.Key != "" {
		for _, path := range []string{c.Cert, c.Key} {
			if _, err := os.Stat(path); err != nil {
				return nil, fmt.Errorf("the certificate and key files of the bus: %w", err)
			}
		}
		opts = append(opts, nats.ClientCert(c.Cert, c.Key))
	}
	return opts, nil
}

// readPassword reads a password file: its first line.
func readPassword(path string) (string, error) {
	text, err := os.ReadFile(path)
	if err != nil {
		return "", fmt.Errorf("the password file of the bus: %w", err)
	}
	line, _, _ := strings.Cut(string(text), "\n")
	password := strings.TrimRight(line, "\r")
	if password == "" {
		return "", fmt.Errorf("the password file of the bus, %s, is empty: "+
			"its first line must be the password", path)
	}
	return password, nil
}

// onLoopback reports whether every server that the URL lists is on this
// machine.
func onLoopback(list string) bool {
	for one := range strings.SplitSeq(list, ",") {
		u, err := url.Parse(strings.TrimSpace(one))
		if err != nil {
			return false
		}
		host := u.Hostname()
		ip := net.ParseIP(host)
		if host != "localhost" && (ip == nil || !ip.IsLoopback()) {
			return false
		}
	}
	return true
}

// shown is the URL without the secrets that it may hold.
func shown(list string) string {
	parts := strings.Split(list, ",")
	for i, one := range parts {
		u, err := url.Parse(strings.TrimSpace(one))
		if err != nil {
			parts[i] = "(unreadable URL)"
			continue
		}
		if u.User != nil {
			u.User = url.User("...")
		}
		parts[i] = u.String()
	}
	return strings.Join(parts, ",")
}
