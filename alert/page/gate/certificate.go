package gate

import (
	"crypto/tls"
	"errors"
	"fmt"
	"os"
	"sync"

	"github.com/rs/zerolog"
)

// certificate is the page's, read again whenever its files change.
type certificate struct {
	cert, key string
	log       zerolog.Logger
	mu        struct {
		sync.Mutex
		held *tls.Certificate
		// seen is what the files were when they were last tried.
		seen [2]os.FileInfo
	}
}

// loadCertificate reads the certificate once, so that a wrong one is told at
// the start.
func loadCertificate(cert, key string, log zerolog.Logger) (*certificate, error) {
	c := &certificate{cert: cert, key: key, log: log}
	seen, err := c.stat()
	if err != nil {
		return nil, err
	}
	held, err := c.read(seen)
	if err != nil {
		return nil, err
	}
	c.mu.held, c.mu.seen = held, seen
	return c, nil
}

func (c *certificate) stat() (seen [2]os.FileInfo, err error) {
	for i, path := range []string{c.cert, c.key} {
		if seen[i], err = os.Stat(path); err != nil {
			return seen, fmt.Errorf("the page's certificate: %w", err)
		}
	}
	return seen, nil
}

func (c *certificate) read(seen [2]os.FileInfo) (*tls.Certificate, error) {
	if mode := seen[1].Mode(); mode.Perm()&0o007 != 0 {
		return nil, fmt.Errorf("the key of the page's certificate, %s, is %v: everybody on the machine can use it: chmod 600 %s", c.key, mode, c.key)
	}
	held, err := tls.LoadX509KeyPair(c.cert, c.key)
	if err != nil {
		return nil, fmt.Errorf("the page's certificate %s with its key: %w", c.cert, err)
	}
	return &held, nil
}

// get returns the certificate as the files have it now. While they can't be
// used, as halfway through a change, the one before goes on.
func (c *certificate) get(*tls.ClientHelloInfo) (*tls.Certificate, error) {
	c.mu.Lock()
	defer c.mu.Unlock()
	seen, err := c.stat()
	if err == nil && sameFile(seen[0], c.mu.seen[0]) && sameFile(seen[1], c.mu.seen[1]) {
		return c.mu.held, nil
	}
	var held *tls.Certificate
	if err == nil {
		c.mu.seen = seen
		held, err = c.read(seen)
	}
	if err != nil {
		c.log.Error().Err(err).Msg("the page goes on with the certificate that it has")
		return c.mu.held, nil
	}
	c.mu.held = held
	c.log.Info().Time("until", held.Leaf.NotAfter).Msg("the page has another certificate")
	return held, nil
}

// config is the server's side of TLS.
func (c *certificate) config() *tls.Config {
	return &tls.Config{MinVersion: tls.VersionTLS12, GetCertificate: c.get, NextProtos: []string{"h2", "http/1.1"}}
}

var errNoPage = errors.New("the set-up has no page")
