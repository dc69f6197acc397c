package intake

import (
	"context"
	"errors"

	"tailbell/ingest/bus"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/partition"
)

// errNoSummaries is of an intake over a source that has nothing beside it.
var errNoSummaries = errors.New("what other partitions tell can't be read here")

// Ahead begins to read what other partitions told after a position, past what Next
// gives. The clock is not guarded there: it moves when the messages come in their
// turn.
func (in *Intake) Ahead(ctx context.Context, after uint64) (partition.Ahead, error) {
	if in.opts.Summaries == nil {
		return nil, errNoSummaries
	}
	source, err := in.opts.Summaries(ctx, after)
	if err != nil {
		return nil, err
	}
	return &ahead{source: source, decoder: wire.NewDecoder(in.limits)}, nil
}

// ahead reads summaries.
type ahead struct {
	source  *bus.Source
	decoder *wire.Decoder
}

// Next waits for at least one summary and returns what is there.
func (a *ahead) Next(ctx context.Context, limit int) ([]monitor.Message, error) {
	raws, err := a.source.Next(ctx, nil, limit, maxBytes)
	if err != nil {
		return nil, err
	}
	messages := make([]monitor.Message, len(raws))
	for i := range raws {
		messages[i] = a.decoder.Decode(wire.Raw(raws[i]))
	}
	return messages, nil
}

// Close ends the reading.
func (a *ahead) Close() error { return a.source.Close() }
