package wire

import (
	"os"
	"regexp"
	"strings"
	"testing"

	"tailbell/monitor"
)

// The page for publishers lists every code of the decoder, and its examples
// are understood.
func TestReadme(t *testing.T) {
	page, err := os.ReadFile("README.md")
	if err != nil {
		t.Fatal(err)
	}
	text := string(page)
	for _, code := range []monitor.Reason{
		monitor.NotJSON, monitor.NotUTF8, monitor.TooLarge, monitor.TooDeep, monitor.TooMany, monitor.NotObject,
		monitor.DuplicateField, monitor.UnknownField, monitor.BadSeries, monitor.BadID, monitor.BadRevision,
		monitor.BadTime, monitor.BadInterval, monitor.BadEvents, monitor.BadExposure, monitor.NothingReported, monitor.BadReading,
		monitor.BadEnvelope, monitor.BadAct, monitor.BadSetting, monitor.BadSubject, monitor.BadHeader,
	} {
		if !strings.Contains(text, "| `"+string(code)+"` |") {
			t.Errorf("the code %s is not in the table", code)
		}
	}
	examples := regexp.MustCompile(`(?m)^    [\[{].*\n(?:     .*\n)*`).FindAllString(text, -1)
	understood := 0
	d := NewDecoder(Limits{})
	for _, example := range examples {
		subject := "obs"
		if strings.Contains(example, `"act"`) {
			subject = "act"
		}
		m := d.Decode(Raw{Subject: subject, Data: []byte(example)})
		for _, it := range m.Items {
			if it.Reason != "" {
				t.Errorf("%s: %s %s", example, it.Reason, it.Detail)
			}
		}
		understood++
	}
	if understood < 5 {
		t.Errorf("only %d examples were found", understood)
	}
}
