package gate

import (
	"bytes"
	_ "embed" // the form and its style
	"html/template"
	"net/http"
	"net/url"
	"strconv"
	"strings"
	"time"
)

// The gate's own paths.
const (
	SignInPath  = "/sign-in"
	SignOutPath = "/sign-out" // takes a POST
	stylePath   = "/sign-in.css"
)

// maxToken is how long a text may be to be looked at as a token.
const maxToken = 200

//go:embed sign-in.html
var formText string

//go:embed sign-in.css
var formStyle []byte

var form = template.Must(template.New("sign-in").Parse(formText))

// formData is what the form shows.
type formData struct {
	To      string // where to go on
	Problem string // "" if there is none
	Style   string
	// Again is set where the browser must ask once more; see admit.
	Again bool
}

// admit lets in whoever signs in.
func (g *Gate) admit(w http.ResponseWriter, r *http.Request, next http.Handler) {
	switch r.URL.Path {
	case stylePath:
		w.Header().Set("Content-Type", "text/css; charset=utf-8")
		g.write(w, http.StatusOK, formStyle)
		return
	case SignInPath:
		g.signIn(w, r)
		return
	case SignOutPath:
		g.signOut(w, r)
		return
	}
	if authorization, given := r.Header["Authorization"]; given {
		g.admitProgram(w, r, next, authorization)
		return
	}
	if cookie, err := r.Cookie(g.cookieName()); err == nil {
		if u, ok := g.sessions.user(g.users(), cookie.Value, g.o.Now()); ok {
			g.pass(w, r, next, Person{u.Name, u.Role})
			return
		}
	}
	switch {
	case r.Method != http.MethodGet && r.Method != http.MethodHead, !strings.Contains(r.Header.Get("Accept"), "text/html"):
		unauthorised(w)
	case r.Header.Get("Sec-Fetch-Site") == "cross-site":
		// A link from elsewhere, say from a message read in a browser, comes
		// without the cookie, which is SameSite=Strict. Asked for once more, by
		// a page of ours, the cookie comes too if there is one.
		g.show(w, http.StatusOK, formData{To: here(r), Again: true})
	default:
		http.Redirect(w, r, SignInPath+"?to="+url.QueryEscape(here(r)), http.StatusSeeOther)
	}
}

// here is the path and query of a request.
func here(r *http.Request) string { return safePath(r.URL.RequestURI()) }

// admitProgram lets in a program by its bearer token.
func (g *Gate) admitProgram(w http.ResponseWriter, r *http.Request, next http.Handler, authorization []string) {
	scheme, token, _ := strings.Cut(authorization[0], " ")
	if len(authorization) == 1 && strings.EqualFold(scheme, "bearer") && len(token) <= maxToken {
		if u, ok := holder(g.users(), token); ok {
			g.pass(w, r, next, Person{u.Name, u.Role})
			return
		}
	}
	if wait := g.wrong(r); wait > 0 {
		tooMany(w, wait)
		return
	}
	unauthorised(w)
}

// wrong counts a wrong token, and tells the log unless there are too many.
func (g *Gate) wrong(r *http.Request) time.Duration {
	wait := g.throttle.wrong(r.RemoteAddr, g.o.Now())
	if wait == 0 {
		g.o.Log.Warn().Str("from", r.RemoteAddr).Msg("a wrong token for the page")
	}
	return wait
}

func unauthorised(w http.ResponseWriter) {
	w.Header().Set("WWW-Authenticate", "Bearer")
	http.Error(w, "Sign in first.", http.StatusUnauthorized)
}

const tooManyText = "Too many wrong tokens came from here. Wait a little."

func tooMany(w http.ResponseWriter, wait time.Duration) {
	w.Header().Set("Retry-After", retryAfter(wait))
	http.Error(w, tooManyText, http.StatusTooManyRequests)
}

func retryAfter(wait time.Duration) string {
	return strconv.Itoa(int((wait + time.Second - 1) / time.Second))
}

// signIn shows the form, and takes it.
func (g *Gate) signIn(w http.ResponseWriter, r *http.Request) {
	switch r.Method {
	case http.MethodGet, http.MethodHead:
		g.show(w, http.StatusOK, formData{To: safePath(r.URL.Query().Get("to"))})
		return
	case http.MethodPost:
	default:
		w.Header().Set("Allow", "GET, HEAD, POST")
		http.Error(w, "Sign in by GET and POST.", http.StatusMethodNotAllowed)
		return
	}
	if err := r.ParseForm(); err != nil {
		g.show(w, http.StatusBadRequest, formData{To: "/", Problem: "The form could not be read. Try again."})
		return
	}
	// Not FormValue: a token in an address would end in logs.
	data := formData{To: safePath(r.PostForm.Get("to"))}
	token := strings.TrimSpace(r.PostForm.Get("token"))
	u, ok := User{}, false
	if len(token) <= maxToken {
		u, ok = holder(g.users(), token)
	}
	if !ok {
		if wait := g.wrong(r); wait > 0 {
			w.Header().Set("Retry-After", retryAfter(wait))
			data.Problem = tooManyText
			g.show(w, http.StatusTooManyRequests, data)
			return
		}
		data.Problem = "This token lets nobody in. Check that it was copied whole, or ask for a new one."
		g.show(w, http.StatusUnauthorized, data)
		return
	}
	value, err := g.sessions.begin(u, g.o.Now(), g.o.Random)
	if err != nil {
		g.o.Log.Error().Err(err).Msg("signing in")
		http.Error(w, "Signing in failed.", http.StatusInternalServerError)
		return
	}
	g.o.Log.Info().Str("user", u.Name).Str("from", r.RemoteAddr).Msg("signed in to the page")
	http.SetCookie(w, g.cookie(value, int(sessionTime/time.Second)))
	http.Redirect(w, r, data.To, http.StatusSeeOther)
}

func (g *Gate) signOut(w http.ResponseWriter, r *http.Request) {
	if r.Method != http.MethodPost {
		w.Header().Set("Allow", "POST")
		http.Error(w, "Sign out by POST.", http.StatusMethodNotAllowed)
		return
	}
	if cookie, err := r.Cookie(g.cookieName()); err == nil {
		if u, ok := g.sessions.user(g.users(), cookie.Value, g.o.Now()); ok {
			g.o.Log.Info().Str("user", u.Name).Msg("signed out of the page")
		}
		g.sessions.end(cookie.Value)
	}
	http.SetCookie(w, g.cookie("", -1))
	http.Redirect(w, r, SignInPath, http.StatusSeeOther)
}

// cookieName tells deployments on one host apart: cookies know no ports. The
// prefix makes browsers insist that the cookie is of this host and of TLS.
func (g *Gate) cookieName() string {
	if g.secure {
		return "__Host-tailbell-" + g.o.Name
	}
	return "tailbell-" + g.o.Name
}

func (g *Gate) cookie(value string, age int) *http.Cookie {
	return &http.Cookie{
		Name: g.cookieName(), Value: value, Path: "/", MaxAge: age,
		HttpOnly: true, Secure: g.secure, SameSite: http.SameSiteStrictMode,
	}
}

// safePath returns the path if it leads to a place of the page, else its
// beginning.
func safePath(to string) string {
	u, err := url.Parse(to)
	if err != nil || u.Scheme != "" || u.Host != "" || u.User != nil || len(to) > 1000 ||
		!strings.HasPrefix(to, "/") || strings.HasPrefix(to, "//") || strings.ContainsFunc(to, unsafe) {
		return "/"
	}
	return to
}

// unsafe reports whether browsers might read a character of a path as
// something else: a backslash as a slash, a control character as nothing.
func unsafe(c rune) bool { return c == '\\' || c <= ' ' || c == 0x7f }

func (g *Gate) show(w http.ResponseWriter, status int, data formData) {
	data.Style = stylePath
	var page bytes.Buffer
	if err := form.Execute(&page, data); err != nil {
		g.o.Log.Error().Err(err).Msg("writing the form to sign in")
		http.Error(w, "The form could not be written.", http.StatusInternalServerError)
		return
	}
	w.Header().Set("Content-Type", "text/html; charset=utf-8")
	if status == http.StatusUnauthorized {
		w.Header().Set("WWW-Authenticate", "Bearer")
	}
	g.write(w, status, page.Bytes())
}

func (g *Gate) write(w http.ResponseWriter, status int, body []byte) {
	w.WriteHeader(status)
	if _, err := w.Write(body); err != nil {
		g.o.Log.Debug().Err(err).Msg("answering a request")
	}
}
