package bus

import (
	"fmt"
	"strconv"
	"strings"
)

// Kind is what a message of the input stream carries: the last token of its
// subject.
type Kind int

// The kinds of message.
const (
	Observation Kind = iota // one observation or several
	Act                     // something that a person did
	Setting                 // a new set-up
	Tick                    // nothing but its time
	Summary                 // what another partition has to tell to sums over several
)

// String returns the kind's token in a subject.
func (k Kind) String() string {
	switch k {
	case Observation:
		return "obs"
	case Act:
		return "act"
	case Setting:
		return "set"
	case Tick:
		return "tick"
	case Summary:
		return "sum"
	}
	return "unknown"
}

// names are the streams and subjects of one deployment.
type names struct {
	deployment string
}

func (n names) inStream() string    { return n.deployment + "-in" }
func (n names) alertStream() string { return n.deployment + "-alerts" }

// in is the subject of a kind of message in a partition.
func (n names) in(partition int, kind Kind) string {
	return n.deployment + ".in." + strconv.Itoa(partition) + "." + kind.String()
}

// inAll matches every message of a partition.
func (n names) inAll(partition int) string {
	return n.deployment + ".in." + strconv.Itoa(partition) + ".*"
}

// summaries matches all that partitions tell each other.
func (n names) summaries() string { return n.deployment + ".in.*." + Summary.String() }

func (n names) alert(partition int, direction, indicator string) string {
	return n.deployment + ".alert." + strconv.Itoa(partition) + "." +
		token(direction) + "." + token(indicator)
}

func (n names) alertAll() string { return n.deployment + ".alert.>" }

// alertSteps matches the steps of alerts, but no mark of an owner.
func (n names) alertSteps() string { return n.deployment + ".alert.*.*.*" }

// alertOf matches all that the owners of a partition publish.
func (n names) alertOf(partition int) string {
	return n.deployment + ".alert." + strconv.Itoa(partition) + ".>"
}

// owner is the subject on which the owner of a partition says that it is it.
func (n names) owner(partition int) string {
	return n.deployment + ".alert." + strconv.Itoa(partition) + ".owner"
}

// The bucket of claims, as the bus's own clients know it.
func (n names) claimStream() string { return "KV_" + n.deployment + "-claims" }
func (n names) claimPrefix() string { return "$KV." + n.deployment + "-claims." }

func (n names) control(verb string) string { return n.deployment + ".control." + verb }

// copies is the object store for copies of stores.
func (n names) copies() string { return n.deployment + "-copies" }

// inbox begins the subjects on which this program is answered. It is not that
// of every client, so that a publisher's account may have its own answers
// without having ours, which carry the stream.
func (n names) inbox() string { return "_INBOX." + n.deployment }

// token makes s one token of a subject: what a subject can't hold becomes "_".
func token(s string) string {
	if s == "" {
		return "_"
	}
	return strings.Map(func(r rune) rune {
		if r <= ' ' || r == 0x7f || r == '.' || r == '*' || r == '>' {
			return '_'
		}
		return r
	}, s)
}

// checkName reports whether a deployment's name can stand in subjects, stream
// names and file names.
func checkName(name string) error {
	ok := name != "" && len(name) <= 64
	for _, r := range name {
		letter := r >= 'a' && r <= 'z' || r >= 'A' && r <= 'Z'
		ok = ok && (letter || r >= '0' && r <= '9' || r == '-' || r == '_')
	}
	if !ok {
		return fmt.Errorf("the deployment's name %q can't name a stream: "+
			"use 1 to 64 letters, digits, \"-\" or \"_\"", name)
	}
	return nil
}
