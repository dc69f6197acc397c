// Package control is how commands reach a running daemon: request and reply on
// the bus.
//
// # Model
//
// A verb is a subject, NAME.control.<verb>. A request is one JSON object with
// the version of this protocol, the time within which the caller wants its
// reply, and a body that only the verb understands; a reply is one JSON object
// with the version and either a body or an error:
//
//	{"version":1,"within_ms":5000,"body":{"alert":"a1"}}
//	{"version":1,"body":{...}}
//	{"version":1,"error":{"code":"not_found","text":"..."}}
//
// An error has a code that programs may rely on and a text for people. The
// codes of this package are listed with their constants; handlers add their
// own.
//
// # Caveats
//
// A request may be handled although its caller no longer waits. Verbs that
// change something do so through the input stream, where a repeat is told from
// a first time.
//
// Requests are limited to 64 KiB, replies to what the bus carries in one
// message (at least 1 MiB, 8 MiB when embedded), handling to the time that the
// caller gives, at most 30 s, and to eight requests at a time.
package control
