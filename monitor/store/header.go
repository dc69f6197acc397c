package store

import (
	"encoding/binary"

	bolt "go.etcd.io/bbolt"
)

// writeHeader replaces the engine's header.
func writeHeader(tx *bolt.Tx, h *head, data []byte) error {
	if data == nil {
		return nil
	}
	r, err := headerShelf.in(tx)
	if err != nil {
		return err
	}
	parts := uint32(0)
	for first := true; first || len(data) > 0; first = false {
		n := min(len(data), partSize)
		if err := r.put(binary.BigEndian.AppendUint32(nil, parts), data[:n]); err != nil {
			return err
		}
		data = data[n:]
		parts++
	}
	for old := parts; old < h.HeaderParts; old++ {
		if err := r.remove(binary.BigEndian.AppendUint32(nil, old)); err != nil {
			return err
		}
	}
	h.HeaderParts = parts
	return nil
}

func readHeader(tx *bolt.Tx, h *head) ([]byte, error) {
	r, err := headerShelf.in(tx)
	if err != nil {
		return nil, err
	}
	var data []byte
	for part := range h.HeaderParts {
		key := binary.BigEndian.AppendUint32(nil, part)
		payload, err := r.get(key)
		if err != nil {
			return nil, err
		}
		if payload == nil {
			return nil, r.damaged(key, "it is missing")
		}
		if data == nil {
			data = make([]byte, 0, len(payload))
		}
		data = append(data, payload...)
	}
	return data, nil
}
