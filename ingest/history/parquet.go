package history

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"math/big"
	"os"
	"strconv"
	"time"

	"github.com/parquet-go/parquet-go"
	"github.com/parquet-go/parquet-go/format"

	"tailbell/ingest/wire"
	"tailbell/monitor"
)

// parquetFile reads a Parquet file: its columns are those of CSV, and each
// value is taken as the cell that would say the same.
func (r *reader) parquetFile(ctx context.Context, path string) (err error) {
	r.begin(path, bytes.NewReader(nil))
	source, size, err := r.openParquet(path)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, source.Close()) }()
	if err := r.parquetRows(ctx, source, size); err != nil {
		return fmt.Errorf("%s: %w", r.path, err)
	}
	r.lines.read = size
	r.report()
	r.done += size
	return nil
}

// closerAt is a file, or standard input in memory.
type closerAt interface {
	io.ReaderAt
	io.Closer
}

type memoryFile struct{ *bytes.Reader }

func (memoryFile) Close() error { return nil }

func (r *reader) openParquet(path string) (closerAt, int64, error) {
	if path == stdin {
		source, err := r.open(path)
		if err != nil {
			return nil, 0, err
		}
		data, err := io.ReadAll(source) // its index stands at the end
		return memoryFile{bytes.NewReader(data)}, int64(len(data)), err
	}
	f, err := os.Open(path)
	if err != nil {
		return nil, 0, err
	}
	info, err := f.Stat()
	if err != nil {
		return nil, 0, errors.Join(err, f.Close())
	}
	return f, info.Size(), nil
}

// parquetRows reads the rows; what the library says of a damaged file, in
// whatever way, is an error.
func (r *reader) parquetRows(ctx context.Context, source io.ReaderAt, size int64) (err error) {
	defer func() {
		if damage := recover(); damage != nil {
			err = fmt.Errorf("the file is damaged: %v", damage)
		}
	}()
	file, err := parquet.OpenFile(source, size)
	if err != nil {
		return fmt.Errorf("it can't be read as Parquet: %w", err)
	}
	t, types, err := r.parquetColumns(file.Schema())
	if err != nil {
		return err
	}
	number, all := 0, file.NumRows()
	for _, group := range file.RowGroups() {
		rows := group.Rows()
		for {
			var batch [256]parquet.Row
			n, err := rows.ReadRows(batch[:])
			for _, row := range batch[:n] {
				number++
				t.parquetRow(number, row, types)
			}
			if err != nil && !errors.Is(err, io.EOF) {
				return errors.Join(fmt.Errorf("after row %d: %w", number, err), rows.Close())
			}
			if err := ctx.Err(); err != nil {
				return errors.Join(err, rows.Close())
			}
			if n == 0 || err != nil {
				break
			}
			r.lines.read = int64(float64(number) / float64(max(all, 1)) * float64(size))
			r.report()
		}
		if err := rows.Close(); err != nil {
			return fmt.Errorf("after row %d: %w", number, err)
		}
	}
	return nil
}

// parquetColumns makes the table of the file's columns, with how each is
// written.
func (r *reader) parquetColumns(schema *parquet.Schema) (*table, []parquet.Type, error) {
	t := &table{reader: r, units: make(map[string]error)}
	var types []parquet.Type
	for _, field := range schema.Fields() {
		if !field.Leaf() || field.Repeated() {
			if err := t.addColumn(field.Name()); err != nil {
				return nil, nil, err
			}
			if c := t.columns[len(t.columns)-1]; c.kind != ignored {
				return nil, nil, fmt.Errorf("the column %s is a list or a group; it must hold one value a row", c.name)
			}
			return nil, nil, fmt.Errorf("column %d is a list or a group: leave it out of the file", len(t.columns))
		}
		if err := t.addColumn(field.Name()); err != nil {
			return nil, nil, err
		}
		types = append(types, field.Type())
	}
	t.plain = newPlainRows(t)
	return t, types, t.checkColumns()
}

// parquetRow takes one row as the cells of a table.
func (t *table) parquetRow(number int, row parquet.Row, types []parquet.Type) {
	for len(t.cells) < len(types) {
		t.cells = append(t.cells, nil)
	}
	for i := range t.cells {
		t.cells[i] = t.cells[i][:0]
	}
	for _, v := range row {
		i := v.Column()
		if v.IsNull() || t.columns[i].kind == ignored {
			continue
		}
		cell, err := cellOf(t.cells[i], v, types[i], t.columns[i].kind)
		if err != nil {
			t.fault(number, reasonFor(t.columns[i]), fmt.Sprintf("%s: %v", t.columns[i].name, err), nil)
			return
		}
		t.cells[i] = cell
	}
	if !t.plain.row(number) {
		t.build(number, bytes.Join(t.cells, []byte{','}))
	}
}

func reasonFor(c column) monitor.Reason {
	switch c.kind {
	case timeColumn, spanColumn:
		return monitor.BadTime
	case textColumn, ignored:
		return BadRow
	case numberColumn, flagColumn:
	}
	return numberReason(c.name)
}

// cellOf appends the value as the cell of a CSV file would have it. Nothing is
// rounded: a decimal has all its places, a floating-point number the fewest
// digits that name it.
func cellOf(dst []byte, v parquet.Value, typ parquet.Type, kind columnKind) ([]byte, error) {
	unsigned := false
	if logical := typ.LogicalType(); logical != nil {
		switch l := logical.Value.(type) {
		case *format.TimestampType:
			return timestamp(dst, v.Int64(), l)
		case *format.DateType:
			return time.Unix(int64(v.Int32())*86400, 0).UTC().AppendFormat(dst, time.DateOnly), nil
		case *format.DecimalType:
			return decimalOf(dst, v, int(l.Scale))
		case *format.IntType:
			unsigned = !l.IsSigned
		case *format.TimeType, *format.UUIDType, *format.Float16Type:
			return nil, fmt.Errorf("values of the type %s mean nothing here", typ)
		}
	}
	switch v.Kind() {
	case parquet.Boolean:
		return strconv.AppendBool(dst, v.Boolean()), nil
	case parquet.Int32:
		if unsigned {
			return strconv.AppendUint(dst, uint64(v.Uint32()), 10), nil
		}
		return strconv.AppendInt(dst, int64(v.Int32()), 10), nil
	case parquet.Int64:
		if unsigned {
			return strconv.AppendUint(dst, v.Uint64(), 10), nil
		}
		return strconv.AppendInt(dst, v.Int64(), 10), nil
	case parquet.Float:
		return number(dst, float64(v.Float()), 32)
	case parquet.Double:
		return number(dst, v.Double(), 64)
	case parquet.ByteArray:
		return append(dst, v.ByteArray()...), nil
	case parquet.Int96:
		x := v.Int96() // nanoseconds of the day, and the Julian day
		at := time.Unix((int64(x[2])-2440588)*86400, int64(uint64(x[1])<<32|uint64(x[0]))).UTC()
		return wire.AppendTime(dst, monitor.InstantOf(at)), nil
	case parquet.FixedLenByteArray:
	}
	return nil, fmt.Errorf("values of the type %s mean nothing in a column of %s", typ, kindNames[kind])
}

var kindNames = map[columnKind]string{
	textColumn: "text", numberColumn: "numbers", timeColumn: "times", spanColumn: "dates", flagColumn: "true and false",
}

// timestamp writes a moment; or, of a local timestamp, what clock and calendar
// showed.
func timestamp(dst []byte, n int64, t *format.TimestampType) ([]byte, error) {
	at := time.Unix(floorDiv(n, 1e9), n-floorDiv(n, 1e9)*1e9).UTC()
	switch t.Unit.Value.(type) {
	case *format.MilliSeconds:
		at = time.UnixMilli(n).UTC()
	case *format.MicroSeconds:
		at = time.UnixMicro(n).UTC()
	}
	if year := at.Year(); !inRange(year) {
		return nil, fmt.Errorf("the year %d is out of range", year)
	}
	if t.IsAdjustedToUTC {
		return wire.AppendTime(dst, monitor.InstantOf(at)), nil
	}
	return at.AppendFormat(dst, "2006-01-02T15:04:05.999999"), nil
}

func floorDiv(a, b int64) int64 {
	q := a / b
	if a%b != 0 && a < 0 {
		q--
	}
	return q
}

// number writes the fewest digits that name the number.
func number(dst []byte, x float64, bits int) ([]byte, error) {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return nil, errors.New("it is no number; leave it out where nothing is known")
	}
	if x == math.Trunc(x) && math.Abs(x) < 1e15 {
		return strconv.AppendInt(dst, int64(x), 10), nil
	}
	return strconv.AppendFloat(dst, x, 'f', -1, bits), nil
}

// decimalOf writes an unscaled whole number with its decimal point.
func decimalOf(dst []byte, v parquet.Value, scale int) ([]byte, error) {
	unscaled := new(big.Int)
	switch v.Kind() {
	case parquet.Int32:
		unscaled.SetInt64(int64(v.Int32()))
	case parquet.Int64:
		unscaled.SetInt64(v.Int64())
	case parquet.ByteArray, parquet.FixedLenByteArray: // two's complement, big-endian
		b := v.ByteArray()
		unscaled.SetBytes(b)
		if len(b) > 0 && b[0]&0x80 != 0 {
			unscaled.Sub(unscaled, new(big.Int).Lsh(big.NewInt(1), uint(8*len(b))))
		}
	case parquet.Boolean, parquet.Int96, parquet.Float, parquet.Double:
		return nil, fmt.Errorf("a decimal is stored as %s", v.Kind())
	}
	if scale < 0 || scale > 38 {
		return nil, fmt.Errorf("a decimal with %d places", scale)
	}
	text := unscaled.Text(10)
	sign := ""
	if text[0] == '-' {
		sign, text = "-", text[1:]
	}
	for len(text) <= scale {
		text = "0" + text
	}
	dst = append(append(dst, sign...), text[:len(text)-scale]...)
	if fraction := bytes.TrimRight([]byte(text[len(text)-scale:]), "0"); len(fraction) > 0 {
		dst = append(append(dst, '.'), fraction...)
	}
	return dst, nil
}
