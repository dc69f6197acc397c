package main

import (
	"bytes"
	"encoding/base64"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"tailbell/ingest/bus/bustest"
	"tailbell/monitor/store"

	"github.com/nats-io/nats.go/jetstream"
)

// TestLeastPrivilege runs a daemon, commands, a publisher and a reader, each
// with the account of a bus that the documentation gives it, over TLS with
// certificates on both sides.
func TestLeastPrivilege(t *testing.T) {
	g := bustest.StartGuarded(t, bustest.Documented(t, "../../ingest/bus/README.md"))
	ward := wardSetup(t)
	as := func(user string) string {
		table := fmt.Sprintf("[bus]\nurl = %q\nuser = %q\npassword_file = %q\nca = %q\ncert = %q\nkey = %q\nmax_bytes = \"64MiB\"\n[[indicator]]",
			g.URL, user, g.PasswordFile(t, user), g.File("ca"), g.File("client"), g.File("client-key"))
		path := edited(t, ward, user+".toml", "[[indicator]]", table)
		return edited(t, path, user+".toml", `folder = "data"`, fmt.Sprintf("folder = %q", filepath.Join(t.TempDir(), user)))
	}
	daemon, command := as("daemon"), as("command")
	startDaemon(t, daemon)

	says(t, 0, []string{"20 counted"}, "feed", "--config", command, falls(t, "quillmere-east/ward-1/fall", 25, 20))
	list := says(t, 0, []string{"unacknowledged"}, "alert", "list", "--config", command)
	alert := strings.Fields(strings.Split(list, "\n")[1])[0]
	says(t, 0, []string{"Noted on alert " + alert}, "alert", "note", alert, "--by", "B. Ostrander", "--why", "line set", "--config", command)

	// Whoever publishes can have the acknowledgement sent to any subject, and
	// whoever reads what is read: an acknowledgement is refused as what it is
	// not, and what was read is not stored again.
	publisher, _ := g.Connect(t, "publisher")
	for i, reply := range []string{"quillmere.in.0.set", "quillmere.in.0.act", "quillmere.in.0.obs"} {
		day := time.Now().UTC().Truncate(24*time.Hour).AddDate(0, 0, -4+i)
		text := fmt.Sprintf(`{"series":"quillmere-east/ward-1/fall","start":%q,"end":%q,"events":0,"exposure":20}`, day.Format(time.RFC3339), day.AddDate(0, 0, 1).Format(time.RFC3339))
		if err := publisher.PublishRequest("quillmere.in.0.obs", reply, []byte(text)); err != nil {
			t.Fatal(err)
		}
	}
	if err := publisher.FlushTimeout(patience); err != nil {
		t.Fatal(err)
	}
	keeper, _ := g.Connect(t, "keeper")
	js, err := jetstream.New(keeper)
	if err != nil {
		t.Fatal(err)
	}
	consumer, err := js.CreateConsumer(t.Context(), "quillmere-alerts", jetstream.ConsumerConfig{Durable: "reader", AckPolicy: jetstream.AckExplicitPolicy})
	if err != nil {
		t.Fatal(err)
	}
	reader, _ := g.Connect(t, "reader")
	if err := reader.PublishRequest("$JS.API.CONSUMER.MSG.NEXT.quillmere-alerts.reader", "quillmere.in.0.obs", []byte("1")); err != nil {
		t.Fatal(err)
	}
	readers, err := jetstream.New(reader)
	if err != nil {
		t.Fatal(err)
	}
	own, err := readers.Consumer(t.Context(), "quillmere-alerts", "reader")
	if err != nil {
		t.Fatal(err)
	}
	msg, err := own.Next(jetstream.FetchMaxWait(patience)) // the note, after the opening that went astray
	if err != nil || !strings.Contains(string(msg.Data()), alert) {
		t.Fatalf("%v", err)
	}
	if info, err := consumer.Info(t.Context()); err != nil || info.Delivered.Consumer != 2 {
		t.Errorf("%+v, %v", info, err)
	}
	refused := ""
	for deadline := time.Now().Add(patience); strings.Count(refused, "\n") < 4 && time.Now().Before(deadline); {
		_, refused, _ = run(t, "refused", "list", "--config", command)
	}
	if strings.Count(refused, "bad_setting") != 1 || strings.Count(refused, "unknown_field") != 2 {
		t.Errorf("what was sent astray was not refused:\n%s", refused)
	}
	says(t, 0, []string{"24 elements: 23 counted", "1 alert not done"}, "status", "--config", command)
}

// TestSecretsStayInTheirFiles runs a daemon with every secret that a set-up
// knows, and looks for them in what it logs, holds and tells, and in the list
// of processes.
func TestSecretsStayInTheirFiles(t *testing.T) {
	g := bustest.StartGuarded(t, bustest.Documented(t, "../../ingest/bus/README.md"))
	path := g.PasswordFile(t, "daemon")
	setup := edited(t, wardSetup(t), "secret.toml", "[[indicator]]", fmt.Sprintf(`[bus]
url = %q
user = "daemon"
password_file = %q
ca = %q
cert = %q
key = %q
max_bytes = "64MiB"
[page]
listen = "127.0.0.1:0"
users = "users"
[[outlet]]
name = "hook"
url = "https://127.0.0.1:1/"
secret_file = "hook-secret"
[[indicator]]`, g.URL, path, g.File("ca"), g.File("client"), g.File("client-key")))
	folder := filepath.Dir(setup)
	hook := "whsec_" + base64.StdEncoding.EncodeToString([]byte("a secret that nobody may see ..."))
	if err := os.WriteFile(filepath.Join(folder, "hook-secret"), []byte(hook), 0o600); err != nil {
		t.Fatal(err)
	}
	token := strings.TrimSpace(says(t, 0, nil, "user", "add", "Asha Venn", "--role", "act", "--config", setup))
	password, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	s := newService(t, setup)
	s.start()
	says(t, 0, []string{"20 counted"}, "feed", "--config", setup, falls(t, "quillmere-east/ward-1/fall", 25, 20))
	command, err := os.ReadFile(fmt.Sprintf("/proc/%d/cmdline", s.cmd.Process.Pid))
	if err != nil {
		t.Log("no list of processes here:", err)
	}
	status := says(t, 0, nil, "status", "--json", "--config", setup)
	s.stop(syscall.SIGTERM)
	file := filepath.Join(folder, "data", "partition-0.store")
	held, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	st, err := store.OpenReadOnly(file, store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	settings, err := st.Settings()
	if err := errors.Join(err, st.Close()); err != nil || len(settings) != 1 || !bytes.Contains(settings[0].Text, []byte("hook-secret")) {
		t.Fatalf("the store does not hold the set-up: %v", err)
	}
	for where, text := range map[string]string{
		"log": s.log.String(), "alerts": s.stdout.String(), "status": status, "list of processes": string(command), "store": string(held), "set-up in the store": string(settings[0].Text),
	} {
		for what, secret := range map[string]string{"password": strings.TrimSpace(string(password)), "secret": hook, "token": token, "token's text": strings.TrimPrefix(token, "tailbell-token-")} {
			if strings.Contains(text, secret) {
				t.Errorf("the %s is in the %s", what, where)
			}
		}
	}
	err = filepath.WalkDir(folder, func(path string, d fs.DirEntry, err error) error {
		if err != nil || d.IsDir() || strings.HasSuffix(path, ".toml") {
			return err
		}
		info, err := d.Info()
		if err == nil && info.Mode().Perm()&0o077 != 0 {
			t.Errorf("%s has mode %v", path, info.Mode())
		}
		return err
	})
	if err != nil {
		t.Error(err)
	}
}
