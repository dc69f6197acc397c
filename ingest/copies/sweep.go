package copies

import "context"

// Parts are a store's parts, stray ones among them; a *bus.Objects has them.
type Parts interface {
	Strays(ctx context.Context, names []string) (map[string]bool, error)
	Sweep(ctx context.Context, strays map[string]bool) error
}

// Sweep removes the parts of copies that never became whole since the process
// that made them died. One that was a stray at the last call too, long enough
// ago for any copy to have become whole, goes. It returns the strays for the
// next call, and how many went.
func Sweep(ctx context.Context, in Parts, partitions int, last map[string]bool) (strays map[string]bool, gone int, err error) {
	var names []string
	for n := range partitions {
		for place := range Kept {
			names = append(names, name(n, place))
		}
	}
	if strays, err = in.Strays(ctx, names); err != nil {
		return last, 0, err
	}
	old := map[string]bool{}
	for stray := range strays {
		if last[stray] {
			old[stray] = true
		}
	}
	return strays, len(old), in.Sweep(ctx, old)
}
