package wire

import (
	"bytes"
	"fmt"
	"strings"
	"unicode/utf8"

	"tailbell/monitor"
)

// fault is why something was refused. A nil fault is none.
type fault struct {
	reason monitor.Reason
	detail string
}

func refuse(reason monitor.Reason, format string, args ...any) *fault {
	return &fault{reason: reason, detail: fmt.Sprintf(format, args...)}
}

// item returns the refusal of these bytes, which it copies.
func (f *fault) item(raw []byte) monitor.Item {
	kept := bytes.Clone(raw)
	if kept == nil {
		kept = []byte{}
	}
	return monitor.Item{Reason: f.reason, Detail: f.detail, Raw: kept}
}

// clip shortens what is quoted in a detail.
func clip[T string | []byte](text T) string {
	const most = 48
	if len(text) <= most {
		return strings.ToValidUTF8(string(text), "\uFFFD")
	}
	end := most
	for end > most-utf8.UTFMax && !utf8.RuneStart(text[end]) {
		end--
	}
	return strings.ToValidUTF8(string(text[:end]), "\uFFFD") + "..."
}
