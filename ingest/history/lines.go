package history

import (
	"bufio"
	"bytes"
	"errors"
	"fmt"
	"io"
)

// maxLine is the longest line that is read, in bytes.
const maxLine = 1 << 20

var tooLong = fmt.Sprintf("the line has more than %d bytes", maxLine)

// line is one line of a file, without its end.
type line struct {
	number  int
	text    []byte
	tooLong bool // text is only its beginning
}

// lineReader reads lines, and takes them back.
type lineReader struct {
	source *bufio.Reader
	number int
	read   int64
	// back holds lines that were taken back, the next one last.
	back []line
	long []byte
}

func newLineReader(source io.Reader) *lineReader {
	return &lineReader{source: bufio.NewReaderSize(source, 64<<10)}
}

// beginsWith reports whether the first thing in the file is this character.
func (r *lineReader) beginsWith(c byte) bool {
	// At the end of a short file Peek gives what there is; an error in reading
	// comes again with next.
	head, _ := r.source.Peek(512) //nolint:errcheck // see above
	head = bytes.TrimLeft(bytes.TrimPrefix(head, []byte(bom)), " \t\r\n")
	return len(head) > 0 && head[0] == c
}

// bom is the byte order mark that some editors put before UTF-8.
const bom = "\xEF\xBB\xBF"

// next returns the next line, valid until the next call; io.EOF after the
// last. A byte order mark before the first is skipped.
func (r *lineReader) next() (line, error) {
	if n := len(r.back); n > 0 {
		l := r.back[n-1]
		r.back = r.back[:n-1]
		return l, nil
	}
	text, err := r.source.ReadSlice('\n')
	r.read += int64(len(text))
	l := line{text: text}
	if errors.Is(err, bufio.ErrBufferFull) {
		l.text, l.tooLong, err = r.rest(text)
	}
	if err != nil && (!errors.Is(err, io.EOF) || len(l.text) == 0) {
		return line{}, err
	}
	r.number++
	l.number = r.number
	if r.number == 1 {
		l.text = bytes.TrimPrefix(l.text, []byte(bom))
	}
	l.text = bytes.TrimSuffix(bytes.TrimSuffix(l.text, []byte("\n")), []byte("\r"))
	return l, nil
}

// rest reads on to the end of a line that began with these bytes, and keeps
// its first maxLine bytes.
func (r *lineReader) rest(first []byte) (text []byte, tooLong bool, err error) {
	r.long = append(r.long[:0], first...)
	for {
		part, err := r.source.ReadSlice('\n')
		r.read += int64(len(part))
		if len(r.long)+len(part) > maxLine {
			part, tooLong = part[:max(0, maxLine-len(r.long))], true
		}
		r.long = append(r.long, part...)
		if !errors.Is(err, bufio.ErrBufferFull) {
			return r.long, tooLong, err
		}
	}
}

// takeBack makes these lines, given in their order, the next ones. Their
// texts must be copies.
func (r *lineReader) takeBack(lines []line) {
	for i := len(lines) - 1; i >= 0; i-- {
		r.back = append(r.back, lines[i])
	}
}
