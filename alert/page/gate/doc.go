// Package gate stands before the page: who may look, who may act, and what a
// request may be.
//
// A Gate is made from the set-up's [page] table. Without users whoever reaches
// the address may look and act, which config allows on loopback alone; with
// users a request carries a token (programs: "Authorization: Bearer ...") or
// the session that a browser got for one at /sign-in. Of tells a handler who
// asks. Whoever has the role Read gets no further than GET.
//
// Whoever is not let in gets the same answer whatever was asked for, so that
// nothing can be learnt from it.
//
// # Caveats
//
// Sessions are held in memory: after a restart of the daemon people sign in
// again. A stream of server-sent events ends after StreamTime, and the browser
// asks for the next by itself, so that it notices what changed in the users.
package gate
