package config

import (
	"fmt"
	"strings"
)

// outlet compares two outlets of one name.
func (c *comparison) outlet(a, b *Outlet) {
	c.value("url", NextLook, a.URL, b.URL, "")
	c.value("secret_file", NextLook, a.SecretFile, b.SecretFile, "")
	m, n := &a.Mail, &b.Mail
	c.value("server", NextLook, m.Server, n.Server, "")
	c.value("tls", NextLook, m.TLS, n.TLS, "")
	c.value("ca", NextLook, m.CA, n.CA, "")
	c.value("user", NextLook, m.User, n.User, "")
	c.value("password_file", NextLook, m.PasswordFile, n.PasswordFile, "")
	c.value("from", NextLook, m.From, n.From, "")
	c.value("to", NextLook, strings.Join(m.To, ", "), strings.Join(n.To, ", "), "")
	c.value("picture", NextLook, m.Picture, n.Picture, "")
	c.value("command", NextLook, strings.Join(a.Command, " "), strings.Join(b.Command, " "), "")
	c.value("time_limit", NextLook, FormatDuration(a.TimeLimit), FormatDuration(b.TimeLimit), "")
	s, t := &a.Told, &b.Told
	c.value("indicators", NextLook, strings.Join(s.Indicators, ", "), strings.Join(t.Indicators, ", "), "")
	c.value("series", NextLook, joined(s.Series), joined(t.Series), "")
	c.value("tails", NextLook, s.tails(), t.tails(), "")
	c.value("p_at_most", NextLook, unlessZero(s.PAtMost), unlessZero(t.PAtMost), "")
	c.value("steps", NextLook, strings.Join(s.Steps, ", "), strings.Join(t.Steps, ", "), "")
	c.value("history", NextLook, s.History, t.History, "")
}

func (t *Told) tails() string {
	return strings.Join(tailWords(&Indicator{Upper: t.Upper, Lower: t.Lower}), ", ")
}

func joined(patterns []Pattern) string {
	words := make([]string, len(patterns))
	for i, p := range patterns {
		words[i] = fmt.Sprint(p)
	}
	return strings.Join(words, ", ")
}
