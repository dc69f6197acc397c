package outlet

import (
	"context"
	"encoding/json"
	"io"

	"tailbell/alert/words"
	"tailbell/monitor/life"
)

// Terminal writes steps as plain sentences, or as JSON records a line.
type Terminal struct {
	w     io.Writer
	width int
	json  bool
}

// NewTerminal returns the outlet that writes to w, in lines of the given
// width or, with asJSON, one JSON notice a line.
func NewTerminal(w io.Writer, width int, asJSON bool) *Terminal {
	return &Terminal{w, width, asJSON}
}

// Name is "terminal".
func (*Terminal) Name() string { return "terminal" }

// Deliver writes the step.
func (t *Terminal) Deliver(_ context.Context, n *life.Notice) error {
	if !t.json {
		_, err := io.WriteString(t.w, words.Notice(n, t.width))
		return err
	}
	line, err := json.Marshal(n)
	if err != nil {
		return err
	}
	_, err = t.w.Write(append(line, '\n'))
	return err
}
