package store

import (
	"fmt"

	"tailbell/monitor"
	"tailbell/monitor/life"
)

// buckets checks that no bucket is there that this format does not know, and
// that the head has nothing but its keys.
func (c *checker) buckets() error {
	known := map[string]bool{}
	for _, s := range append(allShelves(), toldShelf, waitingShelf, daysShelf) {
		known[s.name] = true
	}
	cursor := c.tx.Cursor()
	for name, _ := cursor.First(); name != nil; name, _ = cursor.Next() {
		if !known[string(name)] {
			c.faultf("bucket %q is not part of the format", name)
		}
	}
	_, err := c.each(headShelf, func(r rack, key, _ []byte) error {
		switch string(key) {
		case string(headKey), string(streamKey), string(reasonsKey):
			return nil
		}
		return r.damaged(key, "it is not part of the format")
	})
	return err
}

func (c *checker) header() error {
	count, err := c.each(headerShelf, func(rack, []byte, []byte) error { return nil })
	if err != nil {
		return err
	}
	c.same("parts of the header", count, uint64(c.h.HeaderParts))
	_, err = readHeader(c.tx, &c.h)
	return err
}

// series checks checkpoint and journal against each other: each series has a
// state or a patch, and no state is older than the journal's beginning.
func (c *checker) series() error {
	found := make([]bool, c.h.Series)
	c.report.Series = uint64(c.h.Series)
	count, err := c.each(statesShelf, func(r rack, key, _ []byte) error {
		n, commit, _, err := r.state(key, r.Get(key))
		switch {
		case err != nil:
			return err
		case n >= c.h.Series:
			return r.damaged(key, fmt.Sprintf("there are %d series", c.h.Series))
		case commit > c.h.Commit || commit < c.h.JournalFirst:
			return r.damaged(key, fmt.Sprintf("it is of commit %d, the journal holds %d to %d",
				commit, c.h.JournalFirst, c.h.Commit))
		}
		found[n] = true
		return nil
	})
	if err != nil {
		return err
	}
	c.report.States = count
	c.same("states", count, uint64(c.h.States))
	if err := c.journal(found); err != nil {
		return err
	}
	for n, is := range found {
		if !is {
			c.faultf("series %d has neither a state nor a patch", n)
		}
	}
	return nil
}

func (c *checker) journal(found []bool) error {
	var last part
	err := eachPart(c.tx, &c.h, func(key []byte, p part) error {
		if p.cycle < last.cycle || p.cycle > c.h.Cycle {
			return journalShelf.damaged(key, fmt.Sprintf("round %d after %d, the last is %d", p.cycle, last.cycle, c.h.Cycle))
		}
		if c.h.Accepted == 0 && (p.position < last.position || p.position > c.h.Position) {
			return journalShelf.damaged(key, fmt.Sprintf("position %d after %d, the last is %d", p.position, last.position, c.h.Position))
		}
		last = p
		stray := false
		err := p.each(func(n uint32, _ []byte) {
			c.report.Patches++
			if stray = stray || n >= c.h.Series; !stray {
				found[n] = true
			}
		})
		if err == nil && stray {
			err = journalShelf.damaged(key, fmt.Sprintf("there are %d series", c.h.Series))
		}
		return err
	})
	if err == nil && c.h.Accepted == 0 && c.h.Commit >= c.h.JournalFirst {
		c.same("position of the last journal entry", last.position, c.h.Position)
	}
	return err
}

func (c *checker) ids() error {
	return eachGeneration(c.tx, &c.h, func(g int64, ids []shelved) error {
		c.report.Generations++
		c.report.IDs += uint64(len(ids))
		for i := 1; i < len(ids); i++ {
			if ids[i].number <= ids[i-1].number {
				return idsShelf.damaged(generationKey(g), fmt.Sprintf("id %d after %d", ids[i].number, ids[i-1].number))
			}
		}
		return nil
	})
}

// archive checks the days against what is known of them, and all that is kept
// against the head.
func (c *checker) archive() error {
	r, err := archiveShelf.in(c.tx)
	if err != nil {
		return err
	}
	var kept tally
	days := uint64(0)
	cursor := r.Cursor()
	for key, value := cursor.First(); key != nil; key, value = cursor.Next() {
		if value != nil { // from before days were kept apart
			if err := c.archivePart(r, key, value, &kept); err != nil {
				return err
			}
			continue
		}
		t, err := c.archiveDay(r, key)
		if err != nil {
			return err
		}
		days++
		if g := c.h.LetGo; g == nil || generationOf(key) >= dayOf(g.Before) {
			kept.Parts, kept.Slots = kept.Parts+t.Parts, kept.Slots+t.Slots
		}
	}
	if rows, ok := daysShelf.optional(c.tx); ok {
		count, err := c.each(rows.shelf, func(rack, []byte, []byte) error { return nil })
		if err != nil {
			return err
		}
		c.same("days of the archive", days, count)
	}
	c.report.Archive = c.h.archive()
	c.same("parts of the archive", kept.Parts, c.h.ArchiveParts)
	c.same("archived slots", kept.Slots, c.h.Archived)
	return nil
}

func (c *checker) archivePart(r rack, key, value []byte, t *tally) error {
	slots, err := r.archived(key, value)
	if err != nil {
		return err
	}
	for _, slot := range slots {
		if slot.Number >= c.h.Series {
			return r.damaged(key, fmt.Sprintf("series %d, there are %d", slot.Number, c.h.Series))
		}
	}
	t.Parts, t.Slots = t.Parts+1, t.Slots+uint64(len(slots))
	return nil
}

func (c *checker) archiveDay(r rack, key []byte) (t tally, err error) {
	rows, ok := daysShelf.optional(c.tx)
	if len(key) != 8 || !ok {
		return t, r.damaged(key, "it is no day of the archive")
	}
	d := r.day(key)
	if err := d.ForEach(func(key, value []byte) error { return c.archivePart(*d, key, value, &t) }); err != nil {
		return t, err
	}
	var want tally
	known, err := rows.getJSON(key, &want)
	if err == nil && (!known || want != t) {
		err = rows.damaged(key, fmt.Sprintf("the day holds %+v instead of %+v", t, want))
	}
	return t, err
}

func (c *checker) alerts() error {
	ids, err := alertIDsShelf.in(c.tx)
	if err != nil {
		return err
	}
	open, err := openAlertsShelf.in(c.tx)
	if err != nil {
		return err
	}
	c.report.Alerts, err = c.run(alertsShelf, 1, c.h.Alerts, func(r rack, n uint64, payload []byte) error {
		var record life.Record
		if err := r.parse(number(n), payload, &record); err != nil {
			return err
		}
		indexed, known, err := alertNumber(ids, record.ID)
		if err != nil {
			return err
		}
		if !known || indexed != n {
			c.faultf("alert %d has id %q, which leads to %d", n, record.ID, indexed)
		}
		if (open.Get(number(n)) != nil) == record.Done() {
			c.faultf("alert %d is %s, the index of open alerts says otherwise", n, record.Condition)
		}
		return nil
	})
	return err
}

func (c *checker) openAlerts() error {
	var err error
	c.report.OpenAlerts, err = c.each(openAlertsShelf, func(rack, []byte, []byte) error { return nil })
	if err != nil {
		return err
	}
	c.same("open alerts", c.report.OpenAlerts, c.h.Open)
	indexed, err := c.each(alertIDsShelf, func(rack, []byte, []byte) error { return nil })
	if err == nil {
		c.same("alert ids", indexed, c.h.Alerts)
	}
	return err
}

func (c *checker) refused() error {
	var err error
	c.report.Refused = c.h.Refused
	c.report.RefusedRows, err = c.run(refusedShelf, c.h.RefusedFirst, c.h.Refused, func(r rack, n uint64, payload []byte) error {
		var record refusedRecord
		return r.parse(number(n), payload, &record)
	})
	if err != nil {
		return err
	}
	head, err := headShelf.in(c.tx)
	if err != nil {
		return err
	}
	counts, sum := map[monitor.Reason]uint64{}, uint64(0)
	if _, err := head.getJSON(reasonsKey, &counts); err != nil {
		return err
	}
	for _, n := range counts {
		sum += n
	}
	c.same("refusals by reason", sum, c.h.Refused)
	return nil
}

func (c *checker) refusedRaw() error {
	rows, raws, err := refusedRacks(c.tx)
	if err != nil {
		return err
	}
	total := uint64(0)
	c.report.RefusedRaw, err = c.run(refusedRawShelf, c.h.RawFirst, c.h.Refused, func(_ rack, n uint64, payload []byte) error {
		total += uint64(len(payload))
		if rows.Get(number(n)) == nil {
			return raws.damaged(number(n), "it has no row")
		}
		_, err := refusedRow(rows, raws, n)
		return err
	})
	if err == nil {
		c.same("refused bytes", total, c.h.RawBytes)
		c.same("refusals with bytes", c.report.RefusedRaw, c.h.Raw)
	}
	return err
}

func (c *checker) outbox() error {
	var err error
	c.report.OutboxRows, err = c.run(outboxShelf, c.h.OutboxFirst, c.h.Outbox, func(r rack, n uint64, payload []byte) error {
		var notice life.Notice
		return r.parse(number(n), payload, &notice)
	})
	if err != nil {
		return err
	}
	err = eachOutlet(c.tx, func(name string, at cursor) error {
		c.report.Outlets++
		if at.Delivered > c.h.Outbox || at.Delivered+1 < c.h.OutboxFirst {
			c.faultf("outlet %q stands at step %d, kept are %d to %d", name, at.Delivered, c.h.OutboxFirst, c.h.Outbox)
		}
		for i, n := range at.Skip {
			if n <= at.Delivered+1 || n > c.h.Outbox || (i > 0 && n <= at.Skip[i-1]) {
				c.faultf("outlet %q at step %d passes over step %d, kept are %d to %d", name, at.Delivered, n, c.h.OutboxFirst, c.h.Outbox)
			}
		}
		return nil
	})
	if err == nil {
		c.same("outlets", c.report.Outlets, uint64(c.h.Outlets))
	}
	return err
}

func (c *checker) settings() error {
	count, err := c.each(settingsShelf, func(r rack, key, payload []byte) error {
		var setting monitor.SettingChange
		if err := r.parse(key, payload, &setting); err != nil {
			return err
		}
		n, err := r.numberOf(key)
		if err == nil && n != uint64(setting.Version) {
			err = r.damaged(key, fmt.Sprintf("it holds version %d", setting.Version))
		}
		return err
	})
	c.report.Settings = count
	if err == nil {
		c.same("set-ups", count, uint64(c.h.Settings))
	}
	return err
}

func (c *checker) marks() error {
	marks, err := readMarks(c.tx)
	if err != nil {
		return err
	}
	c.report.Marks = uint64(len(marks))
	c.same("marks", c.report.Marks, uint64(c.h.Marks))
	if len(marks) > 0 && marks[0].Position > c.h.Position {
		c.faultf("a mark stands at position %d beyond the store's %d", marks[0].Position, c.h.Position)
	}
	return nil
}
