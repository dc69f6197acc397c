package outlet

import (
	"bytes"
	"context"
	"crypto/hmac"
	"crypto/sha256"
	"encoding/base64"
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"
	"net/url"
	"os"
	"strconv"
	"strings"
	"time"

	"tailbell/monitor/life"
)

const (
	// webhookTimeout bounds one try from the connection to the answer's end.
	webhookTimeout = 10 * time.Second
	// answerBytes is how much of an answer is read, so that the connection can
	// be used again.
	answerBytes = 4 << 10
	// secretMark begins a secret in the form of Standard Webhooks.
	secretMark = "whsec_"
	// secretLeast and secretMost bound a secret's length in bytes, as Standard
	// Webhooks asks.
	secretLeast, secretMost = 24, 64
)

// Webhook delivers by HTTP POST: the step as a CloudEvent in structured mode,
// signed as Standard Webhooks says (headers webhook-id, webhook-timestamp and
// webhook-signature). The webhook-id is the step's idempotency key: it is the
// same at every try.
//
// Any status from 200 to 299 is delivery; all else is tried again. Redirects
// are not followed: they would carry the event to a place that nobody wrote
// into the set-up.
type Webhook struct {
	name       string
	deployment string
	url        string
	place      string // the URL as it may be shown
	secretFile string
	header     http.Header
	client     *http.Client
	now        func() time.Time
}

// WebhookOptions say where a Webhook delivers.
type WebhookOptions struct {
	// Name names the outlet and its queue.
	Name string
	// Deployment is the deployment's name, for the event's source.
	Deployment string
	// URL is where events are posted: https, or http on this machine.
	URL string
	// SecretFile holds the secrets for signing, one a line, "whsec_" and the
	// key in base64. Events are signed with each, so that a secret can be
	// replaced without a gap. It is read at every delivery.
	SecretFile string
	// Header is sent beside the event; may be nil.
	Header http.Header
	// Now tells the time that is signed. It is the receiver's guard against
	// old messages sent again.
	Now func() time.Time
}

// NewWebhook returns the outlet. It fails if the URL is no place that an event
// may be sent to, or if the secrets can't be read.
func NewWebhook(o WebhookOptions) (*Webhook, error) {
	u, err := url.Parse(o.URL)
	if err != nil || u.Host == "" || u.User != nil {
		// The text is not repeated: it may hold a password.
		return nil, fmt.Errorf("outlet %s: the url is no address without user or password: write e.g. https://hooks.example.org/alerts", o.Name)
	}
	place := u.Scheme + "://" + u.Host
	switch {
	case u.Scheme == "https":
	case u.Scheme == "http" && onThisMachine(u.Hostname()):
	case u.Scheme == "http":
		return nil, fmt.Errorf("outlet %s: %s would be sent in the clear over a network: use https", o.Name, place)
	default:
		return nil, fmt.Errorf("outlet %s: %s is neither https nor http", o.Name, place)
	}
	w := &Webhook{
		name: o.Name, deployment: o.Deployment, url: o.URL, place: place, secretFile: o.SecretFile,
		header: o.Header, now: o.Now,
		client: &http.Client{
			Timeout: webhookTimeout,
			Transport: &http.Transport{
				DialContext:           (&net.Dialer{Timeout: webhookTimeout / 2}).DialContext,
				TLSHandshakeTimeout:   webhookTimeout / 2,
				ResponseHeaderTimeout: webhookTimeout,
				MaxIdleConnsPerHost:   1,
				IdleConnTimeout:       time.Minute,
				ForceAttemptHTTP2:     true,
			},
			CheckRedirect: func(*http.Request, []*http.Request) error { return http.ErrUseLastResponse },
		},
	}
	if _, err := w.keys(); err != nil {
		return nil, fmt.Errorf("outlet %s: %w", o.Name, err)
	}
	return w, nil
}

func onThisMachine(host string) bool {
	ip := net.ParseIP(host)
	return host == "localhost" || (ip != nil && ip.IsLoopback())
}

// Name names the outlet.
func (w *Webhook) Name() string { return w.name }

// Deliver posts the step once.
func (w *Webhook) Deliver(ctx context.Context, n *life.Notice) error {
	event, err := CloudEvent(w.deployment, n)
	if err != nil {
		return err
	}
	keys, err := w.keys()
	if err != nil {
		return err
	}
	req, err := http.NewRequestWithContext(ctx, http.MethodPost, w.url, bytes.NewReader(event))
	if err != nil {
		return fmt.Errorf("posting to %s: %w", w.place, cause(err))
	}
	for name, values := range w.header {
		req.Header[name] = values
	}
	at := strconv.FormatInt(w.now().Unix(), 10)
	req.Header.Set("Content-Type", ContentType)
	req.Header.Set("User-Agent", "tailbell")
	id := webhookID(n.Key)
	req.Header.Set("Webhook-Id", id)
	req.Header.Set("Webhook-Timestamp", at)
	req.Header.Set("Webhook-Signature", Signature(keys, id, at, event))
	return w.post(req)
}

// webhookID is an idempotency key without full stops, which part what is
// signed.
func webhookID(key string) string { return strings.ReplaceAll(key, ".", "-") }

func (w *Webhook) post(req *http.Request) (err error) {
	resp, err := w.client.Do(req)
	if err != nil {
		return fmt.Errorf("posting to %s: %w", w.place, cause(err))
	}
	defer func() { err = errors.Join(err, resp.Body.Close()) }()
	// What the answer says beyond its status is of no interest; reading it
	// lets the connection serve again.
	if _, err := io.CopyN(io.Discard, resp.Body, answerBytes); err != nil && !errors.Is(err, io.EOF) && resp.StatusCode >= 300 {
		return fmt.Errorf("posting to %s: %w", w.place, cause(err))
	}
	switch {
	case resp.StatusCode >= 200 && resp.StatusCode < 300:
		return nil
	case resp.StatusCode >= 300 && resp.StatusCode < 400:
		return fmt.Errorf("posting to %s: it answers with a redirect (%d), which is not followed: correct the url", w.place, resp.StatusCode)
	}
	return fmt.Errorf("posting to %s: it answers %d %s", w.place, resp.StatusCode, http.StatusText(resp.StatusCode))
}

// cause strips an error of the URL, whose path or query may be secret.
func cause(err error) error {
	var u *url.Error
	if errors.As(err, &u) {
		return u.Err
	}
	return err
}

// keys reads the secrets. What they hold is in no error.
func (w *Webhook) keys() ([][]byte, error) {
	text, err := os.ReadFile(w.secretFile)
	if err != nil {
		return nil, fmt.Errorf("the secret file: %w", err)
	}
	var keys [][]byte
	for i, line := range strings.Split(string(text), "\n") {
		line = strings.TrimSpace(line)
		if line == "" {
			continue
		}
		key, err := base64.StdEncoding.DecodeString(strings.TrimPrefix(line, secretMark))
		if !strings.HasPrefix(line, secretMark) || err != nil || len(key) < secretLeast || len(key) > secretMost {
			return nil, fmt.Errorf("the secret file %s, line %d: a secret is %q and then %d to %d random bytes in base64",
				w.secretFile, i+1, secretMark, secretLeast, secretMost)
		}
		keys = append(keys, key)
	}
	if len(keys) == 0 {
		return nil, fmt.Errorf("the secret file %s is empty: write %q and then %d to %d random bytes in base64",
			w.secretFile, secretMark, secretLeast, secretMost)
	}
	return keys, nil
}

// Signature signs a message as Standard Webhooks says: HMAC-SHA256 of
// "id.timestamp.body" under each key, "v1," and base64, with spaces between.
func Signature(keys [][]byte, id, timestamp string, body []byte) string {
	signed := make([]string, len(keys))
	for i, key := range keys {
		mac := hmac.New(sha256.New, key)
		mac.Write([]byte(id + "." + timestamp + "."))
		mac.Write(body)
		signed[i] = "v1," + base64.StdEncoding.EncodeToString(mac.Sum(nil))
	}
	return strings.Join(signed, " ")
}
