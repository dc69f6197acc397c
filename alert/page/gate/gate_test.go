package gate

import (
	"fmt"
	"net/http"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"tailbell/config"
)

func TestLoopbackWithoutUsersIsOpenAndAsksForANameToActUnder(t *testing.T) {
	s := open(t, config.Page{})
	if a := s.ask(s.client(), http.MethodGet, "/", ""); a.status != 200 || !strings.Contains(a.body, secretText) {
		t.Errorf("%+v", a)
	}
	if a := s.ask(s.client(), http.MethodPost, "/alert/a1", "by=Asha"); a.status != 200 {
		t.Errorf("%+v", a)
	}
	if acts := s.acts(); len(acts) != 1 || acts[0].Named() || !acts[0].MayAct() {
		t.Errorf("acts %+v", acts)
	}
}

// TestAwayFromLoopbackNothingIsOpen checks the gate itself, behind config.
func TestAwayFromLoopbackNothingIsOpen(t *testing.T) {
	for _, p := range []config.Page{
		{Listen: "0.0.0.0:1"},
		{Listen: ":1", Users: "u"},
		{Listen: "192.0.2.1:1", Cert: "c", Key: "k"},
		{Listen: "host.example:1"},
		{Listen: "127.0.0.1:1", URL: "https://a.example"},
		{Listen: "127.0.0.1:1", URL: "http://a.example", Users: "u"},
	} {
		if _, err := New(Options{Page: p, Now: time.Now}); err == nil || !strings.Contains(err.Error(), "open to others") {
			t.Errorf("%+v: %v", p, err)
		}
	}
}

// TestWhoeverIsNotLetInSeesNothing sends what may not pass to places that are
// there and places that are not: the answers must be the same.
func TestWhoeverIsNotLetInSeesNothing(t *testing.T) {
	s, actor, _ := openUsers(t, config.Page{})
	gone := addUser(t, s.page.Users, "gone", Act)
	if err := (Book{s.page.Users}).Revoke("GONE", time.Now()); err != nil {
		t.Fatal(err)
	}
	wrong := actor[:len(actor)-1] + "A"
	if wrong == actor {
		wrong = actor[:len(actor)-1] + "Q"
	}
	requests := map[string][]string{
		"nothing": {}, "wrong token": {"Authorization", "Bearer " + wrong}, "revoked token": {"Authorization", "Bearer " + gone},
		"no scheme": {"Authorization", actor}, "other scheme": {"Authorization", "Basic " + actor}, "two": {"Authorization", "Bearer " + actor, "Authorization", "Bearer " + actor},
		"empty": {"Authorization", "Bearer "}, "long": {"Authorization", "Bearer " + strings.Repeat("a", 5000)},
		"digest": {"Authorization", "Bearer " + digestOf(actor).String()},
		"cookie": {"Cookie", s.gate.cookieName() + "=" + actor}, "wrong token and cookie": {"Authorization", "Bearer " + wrong, "Cookie", s.gate.cookieName() + "=x"},
	}
	for name, header := range requests {
		for _, method := range []string{"GET", "HEAD", "POST", "PUT", "DELETE", "OPTIONS"} {
			s.now = s.now.Add(time.Hour) // so that the throttle is not what is tested
			first := s.ask(s.client(), method, "/alert/a1?token="+actor, "token="+actor, header...)
			second := s.ask(s.client(), method, "/missing", "", header...)
			for _, a := range []*answer{&first, &second} {
				a.header.Del("Date")
			}
			if first.status != http.StatusUnauthorized || fmt.Sprint(first) != fmt.Sprint(second) || strings.Contains(first.body, secretText) {
				t.Errorf("%s, %s:\n%+v\n%+v", name, method, first, second)
			}
		}
	}
	// Browsers are sent to the form, with what they asked for and nothing else.
	first := s.ask(s.browser(), "GET", "/alert/a1?x=1", "", "Accept", html)
	if first.status != http.StatusSeeOther || first.header.Get("Location") != "/sign-in?to=%2Falert%2Fa1%3Fx%3D1" || strings.Contains(first.body, secretText) {
		t.Errorf("%+v", first)
	}
	if len(s.acts()) > 0 {
		t.Errorf("acts reached the page: %v", s.acts())
	}
	log := s.log.String()
	for _, secret := range []string{actor, wrong, gone, digestOf(actor).String()} {
		if strings.Contains(log, secret) {
			t.Errorf("the log holds a token:\n%s", log)
		}
	}
}

func TestProgramsUseABearerToken(t *testing.T) {
	s, actor, reader := openUsers(t, config.Page{})
	for token, want := range map[string]struct {
		name string
		post int
	}{actor: {"Asha Venn", 200}, reader: {"audit", 403}} {
		if a := s.ask(s.client(), "GET", "/", "", "Authorization", "bearer "+token); a.status != 200 || a.body != secretText+" for "+want.name {
			t.Errorf("%+v", a)
		}
		for _, method := range []string{"POST", "PUT", "DELETE", "PATCH"} {
			if a := s.ask(s.client(), method, "/", "", "Authorization", "Bearer "+token); a.status != want.post {
				t.Errorf("%s by %s: %+v", method, want.name, a)
			}
		}
	}
	if acts := s.acts(); !slices.Equal(acts, []Person{{"Asha Venn", Act}}) {
		t.Errorf("acts %+v", acts)
	}
}

func TestBrowsersSignInAndOut(t *testing.T) {
	s, actor, reader := openUsers(t, config.Page{})
	b := s.browser()
	if a := s.ask(b, "GET", "/sign-in?to=/alert/a1", "", "Accept", html); a.status != 200 || !strings.Contains(a.body, `value="/alert/a1"`) {
		t.Errorf("%+v", a)
	}
	if a := s.ask(b, "GET", "/sign-in.css", ""); a.status != 200 || !strings.HasPrefix(a.header.Get("Content-Type"), "text/css") {
		t.Errorf("%+v", a)
	}
	if a := s.signIn(b, "wrong"); a.status != 401 || !strings.Contains(a.body, "lets nobody in") || a.header.Get("Set-Cookie") != "" {
		t.Errorf("%+v", a)
	}
	if a := s.ask(b, "POST", SignInPath+"?token="+actor, "to=%2F", "Content-Type", formType); a.status != 401 {
		t.Errorf("a token in the address lets in: %+v", a)
	}
	a := s.signIn(b, actor)
	cookie := a.header.Get("Set-Cookie")
	if a.status != 303 || a.header.Get("Location") != "/alert/a1" || !strings.HasPrefix(cookie, "tailbell-quillmere=") ||
		!strings.Contains(cookie, "; HttpOnly; SameSite=Strict") || strings.Contains(cookie, actor) || !strings.Contains(cookie, "Path=/; Max-Age=43200") {
		t.Errorf("%+v", a)
	}
	if a := s.ask(b, "POST", "/alert/a1", "", "Sec-Fetch-Site", "same-origin"); a.status != 200 {
		t.Errorf("%+v", a)
	}
	if acts := s.acts(); !slices.Equal(acts, []Person{{"Asha Venn", Act}}) {
		t.Errorf("acts %+v", acts)
	}
	if a := s.ask(b, "GET", SignOutPath, ""); a.status != 405 {
		t.Errorf("%+v", a)
	}
	if a := s.ask(b, "POST", SignOutPath, ""); a.status != 303 || !strings.Contains(a.header.Get("Set-Cookie"), "Max-Age=0") {
		t.Errorf("%+v", a)
	}
	value, _, _ := strings.Cut(cookie, ";")
	if a := s.ask(s.client(), "GET", "/", "", "Cookie", value); a.status != 401 {
		t.Errorf("the cookie of a session that was ended lets in: %+v", a)
	}
	// A reader's session may not act.
	if a := s.signIn(b, reader); a.status != 303 {
		t.Fatalf("%+v", a)
	}
	if a := s.ask(b, "POST", "/alert/a1", ""); a.status != 403 || len(s.acts()) != 1 {
		t.Errorf("%+v", a)
	}
}

func TestSessionsEnd(t *testing.T) {
	s, actor, _ := openUsers(t, config.Page{})
	signedIn := func(b *http.Client) bool { return s.ask(b, "GET", "/", "").status == 200 }
	b := s.browser()
	s.signIn(b, actor)
	s.now = s.now.Add(sessionTime - time.Second)
	if !signedIn(b) {
		t.Error("ended too early")
	}
	s.now = s.now.Add(time.Second)
	if signedIn(b) {
		t.Error("not ended by time")
	}
	// A user has only so many at once.
	browsers := make([]*http.Client, sessionsEach+1)
	for i := range browsers {
		browsers[i] = s.browser()
		s.now = s.now.Add(time.Second)
		s.signIn(browsers[i], actor)
	}
	if signedIn(browsers[0]) || !signedIn(browsers[1]) || !signedIn(browsers[sessionsEach]) {
		t.Error("the oldest session goes on, or a younger one ended")
	}
	// With the token goes what it began, also if there is a new one.
	book := Book{s.page.Users}
	if err := book.Revoke("Asha Venn", s.now); err != nil {
		t.Fatal(err)
	}
	if signedIn(browsers[2]) {
		t.Error("a revoked user is still signed in")
	}
	fresh := addUser(t, s.page.Users, "Asha Venn", Act)
	if signedIn(browsers[3]) {
		t.Error("a session of a revoked token came back")
	}
	if s.signIn(browsers[3], fresh); !signedIn(browsers[3]) {
		t.Error("the new token does not let in")
	}
}

func TestOtherSitesAreRefused(t *testing.T) {
	s, actor, _ := openUsers(t, config.Page{})
	b := s.browser()
	s.signIn(b, actor)
	post := []string{"Content-Type", formType}
	for _, header := range [][]string{
		{"Sec-Fetch-Site", "cross-site"}, {"Sec-Fetch-Site", "same-site"}, {"Origin", "https://elsewhere.example"}, {"Origin", "null"},
	} {
		for _, path := range []string{"/alert/a1", SignInPath, SignOutPath} {
			if a := s.ask(b, "POST", path, "token="+actor, append(header, post...)...); a.status != 403 {
				t.Errorf("%v %s: %+v", header, path, a)
			}
		}
	}
	// Nor may another site have a part of the page, or frame it.
	for _, header := range [][]string{
		{"Sec-Fetch-Site", "cross-site", "Sec-Fetch-Mode", "no-cors", "Sec-Fetch-Dest", "image"},
		{"Sec-Fetch-Site", "same-site", "Sec-Fetch-Mode", "cors", "Sec-Fetch-Dest", "empty"},
		{"Sec-Fetch-Site", "cross-site", "Sec-Fetch-Mode", "navigate", "Sec-Fetch-Dest", "iframe"},
	} {
		if a := s.ask(b, "GET", "/", "", header...); a.status != 403 || strings.Contains(a.body, secretText) {
			t.Errorf("%v: %+v", header, a)
		}
	}
	if len(s.acts()) > 0 || s.ask(b, "GET", "/", "").status != 200 {
		t.Error("an act came through, or the session was ended from elsewhere")
	}
	link := []string{"Sec-Fetch-Site", "cross-site", "Sec-Fetch-Mode", "navigate", "Sec-Fetch-Dest", "document", "Accept", html}
	if a := s.ask(b, "GET", "/", "", link...); a.status != 200 {
		t.Errorf("a link from elsewhere: %+v", a)
	}
	// As browsers send it: without the cookie. It is asked for once more.
	a := s.ask(s.client(), "GET", "/alert/a1?x=1&y=2", "", link...)
	if a.status != 200 || !strings.Contains(a.body, `content="0; url=/alert/a1?x=1&amp;y=2"`) || strings.Contains(a.body, secretText) {
		t.Errorf("%+v", a)
	}
}

func TestForeignHostsAreRefusedOnLoopback(t *testing.T) {
	s := open(t, config.Page{})
	for _, host := range []string{"rebound.example", "rebound.example:80", "127.0.0.1.example", "192.0.2.1", "localhost.example"} {
		if a := s.ask(s.client(), "GET", "/", "", "Host", host); a.status != http.StatusMisdirectedRequest || strings.Contains(a.body, secretText) {
			t.Errorf("%s: %+v", host, a)
		}
	}
	for _, host := range []string{"localhost", "localhost:99", "127.0.0.1", "[::1]:4871"} {
		if a := s.ask(s.client(), "GET", "/", "", "Host", host); a.status != 200 {
			t.Errorf("%s: %+v", host, a)
		}
	}
	proxied, actor, _ := openUsers(t, config.Page{URL: "https://tailbell.quillmere.example"})
	b := proxied.browser()
	a := proxied.ask(b, "POST", SignInPath, "token="+actor, "Content-Type", formType, "Host", "127.0.0.1", "Origin", "https://tailbell.quillmere.example")
	if cookie := a.header.Get("Set-Cookie"); a.status != 303 || !strings.HasPrefix(cookie, "__Host-tailbell-quillmere=") || !strings.Contains(cookie, "; Secure") {
		t.Errorf("behind a proxy: %+v", a)
	}
	if a := proxied.ask(b, "GET", "/", "", "Host", "Tailbell.quillmere.example", "Authorization", "Bearer "+actor); a.status != 200 {
		t.Errorf("behind a proxy: %+v", a)
	}
}

func TestAnswersAllowNothingFromElsewhere(t *testing.T) {
	s, actor, _ := openUsers(t, config.Page{})
	for path, header := range map[string][]string{"/": {"Authorization", "Bearer " + actor}, SignInPath: {}, "/x": {}} {
		a := s.ask(s.client(), "GET", path, "", header...)
		for name, want := range map[string]string{
			"Content-Security-Policy": "default-src 'none'; ", "X-Content-Type-Options": "nosniff", "Referrer-Policy": "same-origin",
			"Cross-Origin-Resource-Policy": "same-origin", "Cache-Control": "no-store",
		} {
			if !strings.HasPrefix(a.header.Get(name), want) {
				t.Errorf("%s: %s is %q", path, name, a.header.Get(name))
			}
		}
		if csp := a.header.Get("Content-Security-Policy"); strings.Contains(csp, "unsafe") || strings.Contains(csp, "http") || !strings.Contains(csp, "frame-ancestors 'none'") {
			t.Errorf("%s: %s", path, csp)
		}
		if strings.Contains(a.body, "<style") || strings.Contains(a.body, "style=") || strings.Contains(a.body, "<script") {
			t.Errorf("%s has what the policy forbids", path)
		}
	}
}

func TestLargeRequestsAreRefused(t *testing.T) {
	s, actor, _ := openUsers(t, config.Page{})
	bearer := []string{"Authorization", "Bearer " + actor}
	if a := s.ask(s.client(), "POST", "/", strings.Repeat("x", maxBody+1), bearer...); a.status != http.StatusRequestEntityTooLarge {
		t.Errorf("%+v", a)
	}
	req, err := http.NewRequestWithContext(t.Context(), "GET", s.url("/"), nil)
	if err != nil {
		t.Fatal(err)
	}
	req.Header.Set("Authorization", bearer[1])
	req.Header.Set("X-Long", strings.Repeat("x", 2*maxHeader))
	// The connection may be gone before the answer is read.
	if resp, err := s.client().Do(req); err == nil && resp.StatusCode != http.StatusRequestHeaderFieldsTooLarge {
		t.Errorf("%v", resp.Status)
	}
	if a := s.ask(s.client(), "POST", SignInPath, "token="+strings.Repeat("x", maxBody+1), "Content-Type", formType); a.status != 400 {
		t.Errorf("%+v", a)
	}
	if len(s.acts()) > 0 {
		t.Errorf("acts %v", s.acts())
	}
}

// TestWrongTokensAreLimited checks that a flood of wrong tokens is told so,
// fills no log, and locks nobody out.
func TestWrongTokensAreLimited(t *testing.T) {
	s, actor, _ := openUsers(t, config.Page{})
	b := s.browser()
	s.signIn(b, actor)
	bearer := func(token string) answer { return s.ask(s.client(), "GET", "/", "", "Authorization", "Bearer "+token) }
	for i := range wrongAtOnce + 5 {
		want := http.StatusUnauthorized
		if i >= wrongAtOnce {
			want = http.StatusTooManyRequests
		}
		if a := bearer(fmt.Sprint("wrong", i)); a.status != want || (want == 429) != (a.header.Get("Retry-After") == "6") {
			t.Errorf("wrong token %d: %+v", i+1, a)
		}
	}
	if a := s.signIn(s.browser(), "wrong"); a.status != 429 || !strings.Contains(a.body, "Too many wrong tokens") {
		t.Errorf("%+v", a)
	}
	if n := strings.Count(s.log.String(), "wrong token"); n != wrongAtOnce {
		t.Errorf("%d lines of the log are about wrong tokens", n)
	}
	// Others at the same address go on.
	if bearer(actor).status != 200 || s.ask(b, "GET", "/", "").status != 200 || s.signIn(s.browser(), actor).status != 303 {
		t.Error("a right token was refused because of others' wrong ones")
	}
	s.now = s.now.Add(wrongEvery)
	if bearer("wrong").status != 401 || bearer("wrong").status != 429 {
		t.Error("not one more after a while")
	}
}

// TestThrottleTellsAddressesApart also fills it beyond what it can tell apart.
func TestThrottleTellsAddressesApart(t *testing.T) {
	var h throttle
	now := time.Now()
	drain := func(remote string) (n int) {
		for h.wrong(remote, now) == 0 {
			n++
		}
		return n
	}
	for _, c := range []struct {
		remote string
		want   int
	}{
		{"192.0.2.1:1", wrongAtOnce},
		{"192.0.2.1:2", 0},
		{"[::ffff:192.0.2.1]:3", 0},
		{"192.0.2.2:1", wrongAtOnce},
		{"[2001:db8::1]:1", wrongAtOnce},
		{"[2001:db8::2]:1", 0},
		{"[2001:db8:0:1::2]:1", wrongAtOnce},
	} {
		if n := drain(c.remote); n != c.want {
			t.Errorf("%s: %d wrong tokens, want %d", c.remote, n, c.want)
		}
	}
	for i := range wrongPlaces {
		h.wrong(fmt.Sprintf("10.%d.%d.%d:1", i>>16, i>>8&255, i&255), now)
	}
	if n := len(h.mu.places); n > wrongPlaces {
		t.Errorf("%d addresses are kept", n)
	}
	now = now.Add(time.Hour)
	if n := drain("198.51.100.1:1"); n != wrongAtOnce || len(h.mu.places) > 2 {
		t.Errorf("%d wrong tokens after an hour, %d addresses kept", n, len(h.mu.places))
	}
}

func TestUsersAreReadAgain(t *testing.T) {
	s, actor, _ := openUsers(t, config.Page{})
	status := func(token string) int {
		return s.ask(s.client(), "GET", "/", "", "Authorization", "Bearer "+token).status
	}
	fresh := addUser(t, s.page.Users, "night shift", Read)
	if status(fresh) != 200 {
		t.Error("a new user needs a restart")
	}
	// A file that others can read, or that is damaged, lets nobody in.
	if err := os.Chmod(s.page.Users, 0o644); err != nil {
		t.Fatal(err)
	}
	if status(actor) != 401 || !strings.Contains(s.log.String(), "chmod 600") {
		t.Errorf("a file that others can read lets in; the log:\n%s", s.log)
	}
	if err := os.Chmod(s.page.Users, 0o600); err != nil {
		t.Fatal(err)
	}
	if status(actor) != 200 {
		t.Error("not let in any more")
	}
	if err := os.WriteFile(s.page.Users, []byte("{"), 0o600); err != nil {
		t.Fatal(err)
	}
	if status(actor) != 401 {
		t.Error("a damaged file lets in")
	}
	if err := os.Remove(s.page.Users); err != nil {
		t.Fatal(err)
	}
	if status(actor) != 401 {
		t.Error("no file lets in")
	}
}

func TestSafePath(t *testing.T) {
	for to, want := range map[string]string{
		"/alert/a1?x=%2F#y": "/alert/a1?x=%2F#y", "": "/", "//elsewhere.example": "/", `/\elsewhere.example`: "/", `\\elsewhere.example`: "/",
		"https://elsewhere.example/": "/", "javascript:alert(1)": "/", "/a\nb": "/", "/\t/elsewhere.example": "/", "alert": "/", "/" + strings.Repeat("a", 1000): "/",
	} {
		if got := safePath(to); got != want {
			t.Errorf("%q: %q", to, got)
		}
	}
}

func TestNewReadsTheUsersFirst(t *testing.T) {
	path := filepath.Join(t.TempDir(), "users")
	if err := os.WriteFile(path, []byte(`{"format":2}`), 0o600); err != nil {
		t.Fatal(err)
	}
	_, err := New(Options{Page: config.Page{Listen: "127.0.0.1:1", Users: path}, Now: time.Now})
	if err == nil || !strings.Contains(err.Error(), "format 2") {
		t.Error(err)
	}
}
