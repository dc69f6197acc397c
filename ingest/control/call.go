package control

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"time"

	"tailbell/ingest/bus"

	"github.com/nats-io/nats.go"
)

// Call asks the daemon: it sends arg (nil for none) and decodes the reply into
// result (nil to drop it). The daemon gets the time that is left until ctx's
// deadline, at most 30 s. What the daemon reports is an *Error; its code is
// NoAnswer if no daemon answers the verb.
func Call(ctx context.Context, b *bus.Bus, verb string, arg, result any) error {
	return call(ctx, b, b.ControlSubject(verb), verb, arg, result)
}

// CallMember asks one of several processes, by its name.
func CallMember(ctx context.Context, b *bus.Bus, member, verb string, arg, result any) error {
	return call(ctx, b, b.MemberSubject(member, verb), verb, arg, result)
}

func call(ctx context.Context, b *bus.Bus, subject, verb string, arg, result any) error {
	if err := checkVerb(verb); err != nil {
		return err
	}
	ctx, cancel := context.WithTimeout(ctx, longest)
	defer cancel()
	data, err := writeRequest(ctx, arg)
	if err != nil {
		return err
	}
	msg, err := b.Request(ctx, subject, data)
	switch {
	case errors.Is(err, nats.ErrNoResponders):
		return Errorf(NoAnswer, "no daemon answers %q: is it running, and of the same version?", verb)
	case err != nil:
		return fmt.Errorf("asking the daemon to %s: %w", verb, err)
	}
	return readReply(verb, msg.Data, result)
}

// writeRequest encodes a request with the time left in ctx.
func writeRequest(ctx context.Context, arg any) ([]byte, error) {
	req := request{Version: Version}
	if deadline, ok := ctx.Deadline(); ok {
		req.WithinMS = max(1, time.Until(deadline).Milliseconds())
	}
	if arg != nil {
		body, err := json.Marshal(arg)
		if err != nil {
			return nil, fmt.Errorf("encoding a request: %w", err)
		}
		req.Body = body
	}
	data, err := json.Marshal(req)
	if err != nil {
		return nil, fmt.Errorf("encoding a request: %w", err)
	}
	if len(data) > maxRequest {
		return nil, Errorf(BadRequest, "the request has %d bytes, the limit is %d", len(data), maxRequest)
	}
	return data, nil
}

// readReply takes a reply apart.
func readReply(verb string, data []byte, result any) error {
	var r reply
	if err := json.Unmarshal(data, &r); err != nil {
		return fmt.Errorf("the reply to %q is not of this protocol: %w", verb, err)
	}
	if r.Version != Version {
		return Errorf(BadVersion, "the reply to %q is of version %d, this program speaks %d: "+
			"use the program that runs the daemon", verb, r.Version, Version)
	}
	if r.Error != nil {
		return r.Error
	}
	if result == nil {
		return nil
	}
	if err := json.Unmarshal(r.Body, result); err != nil {
		return fmt.Errorf("the reply to %q can't be read: %w", verb, err)
	}
	return nil
}
