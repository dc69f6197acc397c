package gate

import "net/http"

// policy lets the page use its own files and nothing else: no script or style
// within the text, nothing from elsewhere, no frame around it.
const policy = "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self'; font-src 'self'; connect-src 'self'; " +
	"form-action 'self'; base-uri 'none'; frame-ancestors 'none'"

// setHeaders sets what every answer carries. A handler of files that never
// change may set another Cache-Control.
//
// There is no Strict-Transport-Security: it would speak for every port of the
// host, and nothing is served here without TLS that it could guard.
func setHeaders(h http.Header) {
	h.Set("Content-Security-Policy", policy)
	h.Set("X-Content-Type-Options", "nosniff")
	// Not no-referrer: with it browsers send forms with "Origin: null".
	h.Set("Referrer-Policy", "same-origin")
	h.Set("Cross-Origin-Opener-Policy", "same-origin")
	h.Set("Cross-Origin-Resource-Policy", "same-origin")
	h.Set("Permissions-Policy", "camera=(), microphone=(), geolocation=(), payment=(), usb=()")
	h.Set("Cache-Control", "no-store")
}
