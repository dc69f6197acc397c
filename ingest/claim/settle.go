package claim

import (
	"context"
	"errors"

	"tailbell/ingest/bus"
)

// Settle notes how far partitions have come that nobody owns, for whoever owns
// them next. The caller sees to it that no member is at work.
func Settle(ctx context.Context, on Board, rows []Row) error {
	entries, err := on.All(ctx)
	if err != nil {
		return err
	}
	b, err := readBoard(entries)
	if err != nil {
		return err
	}
	puts := make([]bus.Put, len(rows))
	for i, r := range rows {
		r.Owner = ""
		puts[i] = put(keyOf(r.Partition), r.Holding, b.partitions[r.Partition].revision, 0)
	}
	var errs []error
	for _, o := range on.PutAll(ctx, puts) {
		errs = append(errs, o.Err)
	}
	return errors.Join(errs...)
}
