package decode

import (
	"bytes"
	"fmt"
	"math/bits"
	"slices"
	"unicode/utf8"

	"stillwell/online/expr"
)

// CSVOptions are the ways in which CSV files differ.
type CSVOptions struct {
	Comma byte // between cells; 0 is ','
}

// CSV decodes events that are one record (RFC 4180) each, in UTF-8, after a header.
//
//   - A path is the name of a column, dots and all.
//   - An empty cell, also in quotes, is absent.
//   - A cell of a field marked Numeric that reads as a finite number, or as one too
//     large for float64, is an expr.Number; spaces around it, a plus, leading zeros and a
//     bare point as in .5 are allowed. All other cells are Text, true and false too.
//   - A cell in quotes may hold commas and, doubled, quotes; a line break in it is a
//     fault, for an event is one line. A quote inside an unquoted cell is one too.
type CSV struct {
	fields  []Field
	slots   map[string]int
	header  []byte // as given last
	columns []int  // slot of each column; -1 where it is not wanted
	missing []string
	comma   byte
	scratch []byte // cells with doubled quotes
	fault   Fault
}

// NewCSV returns a decoder of the fields, whose order gives their slots. It
// panics if two fields have one path, and fails if no cell could be told from its
// neighbour with that comma.
func NewCSV(fields []Field, opts CSVOptions) (*CSV, error) {
	if opts.Comma == 0 {
		opts.Comma = ','
	}
	if c := opts.Comma; c == '"' || c == '\n' || c == '\r' || c >= utf8.RuneSelf {
		return nil, fmt.Errorf("csv: cells cannot be separated by %q, want an ASCII character other than a quote or a line break", rune(c))
	}
	return &CSV{fields: slices.Clone(fields), slots: slotsOf(fields), comma: opts.Comma}, nil
}

// Header takes a file's first line, which names the columns, in place of any
// header before. It fails, and changes nothing, if the line is no CSV record or
// names a wanted column twice. A byte order mark is dropped. To give the same line
// again, as with every block of a file, costs next to nothing.
func (d *CSV) Header(line []byte) error {
	if d.columns != nil && bytes.Equal(line, d.header) {
		return nil
	}
	given := line
	line = trimLine(bytes.TrimPrefix(line, []byte("\ufeff")))
	if !d.valid(line) {
		return d.headerError()
	}
	var columns []int
	found := make([]bool, len(d.fields))
	for p := 0; ; p++ {
		cell, end := d.cell(line, p)
		if end < 0 {
			return d.headerError()
		}
		slot, wanted := d.slots[string(cell)]
		if !wanted {
			slot = -1
		} else if found[slot] {
			return fmt.Errorf("csv header: column %q stands twice, want each wanted column once", cell)
		} else {
			found[slot] = true
		}
		columns = append(columns, slot)
		if p = end; p == len(line) {
			break
		}
	}
	d.header, d.columns, d.missing = bytes.Clone(given), columns, nil
	for i, f := range d.fields {
		if !found[i] {
			d.missing = append(d.missing, f.Path)
		}
	}
	return nil
}

func (d *CSV) headerError() error {
	f := d.fault // the next line must not change what the caller keeps
	return fmt.Errorf("csv header: %w", &f)
}

// Missing lists the fields that the header does not name: they are absent from
// every event under it.
func (d *CSV) Missing() []string { return d.missing }

// Decode implements Decoder, for a line after the header.
func (d *CSV) Decode(line []byte, rec expr.Record) error {
	clear(rec)
	d.scratch = d.scratch[:0]
	if !d.record(trimLine(line), rec) {
		clear(rec)
		return &d.fault
	}
	return nil
}

func (d *CSV) record(line []byte, rec expr.Record) bool {
	if d.columns == nil {
		return d.fail(NoHeader, -1, "a CSV file starts with a line that names its columns")
	}
	if !d.valid(line) {
		return false
	}
	p := 0
	for i, slot := range d.columns {
		cell, end := d.cell(line, p)
		if end < 0 {
			return false
		}
		if slot >= 0 && len(cell) > 0 {
			setCell(&rec[slot], cell, d.fields[slot].Numeric)
		}
		p = end
		switch last := i == len(d.columns)-1; {
		case last && p < len(line):
			return d.fail(Cells, p, "more cells than the header names")
		case !last && p == len(line):
			return d.fail(Cells, p, "fewer cells than the header names")
		}
		p++
	}
	return true
}

// setCell makes a number of a cell that is to be one and can be.
func setCell(v *expr.Value, cell []byte, numeric bool) {
	v.Kind, v.Text = expr.Text, cell
	if !numeric {
		return
	}
	text := trimCell(cell)
	if num, end, form := scanDecimal(text, 0); form != notNumber && end == len(text) {
		v.Kind, v.Num, v.Text = expr.Number, num.float(text), text
	}
}

// trimCell drops spaces and tabs around a cell.
func trimCell(s []byte) []byte {
	for len(s) > 0 && (s[0] == ' ' || s[0] == '\t') {
		s = s[1:]
	}
	for len(s) > 0 && (s[len(s)-1] == ' ' || s[len(s)-1] == '\t') {
		s = s[:len(s)-1]
	}
	return s
}

// cell returns the cell at p and where it ends: at a comma or at the end of the
// line. end is negative after a fault.
func (d *CSV) cell(line []byte, p int) (cell []byte, end int) {
	if peek(line, p) == '"' {
		return d.quoted(line, p+1)
	}
	q := scanCell(line, p, d.comma)
	switch c := peek(line, q); {
	case q == len(line) || c == d.comma:
		return line[p:q], q
	case c == '"':
		d.fail(Syntax, q, "a quote inside a cell that does not start with one")
	default:
		d.fail(Syntax, q, "a line break inside the record; an event is one line")
	}
	return nil, -1
}

// quoted reads a cell whose opening quote stands before p.
func (d *CSV) quoted(line []byte, p int) (cell []byte, end int) {
	from, n := p, len(d.scratch)
	for {
		q := bytes.IndexByte(line[p:], '"')
		if q < 0 {
			d.fail(Syntax, len(line), "a quoted cell must end on its line; line breaks in quotes are not supported")
			return nil, -1
		}
		if b := bytes.IndexByte(line[p:p+q], '\n'); b >= 0 {
			d.fail(Syntax, p+b, "line breaks in quotes are not supported")
			return nil, -1
		}
		q += p
		switch c := peek(line, q+1); {
		case c == '"':
			d.scratch = append(d.scratch, line[p:q+1]...)
			p = q + 2
		case q+1 == len(line) || c == d.comma:
			if p == from { // no doubled quote so far
				return line[from:q], q + 1
			}
			d.scratch = append(d.scratch, line[p:q]...)
			return d.scratch[n:], q + 1
		default:
			d.fail(Syntax, q+1, "text after the closing quote of a cell")
			return nil, -1
		}
	}
}

// scanCell returns the first position from p on of a comma, a quote or a line
// break, or the length of the line.
func scanCell(s []byte, p int, comma byte) int {
	commas := uint64(comma) * each
	for p+8 <= len(s) {
		w := load8(s, p)
		c, q, b := w^commas, w^'"'*each, w^'\n'*each
		if m := ((c-each)&^c | (q-each)&^q | (b-each)&^b) & topBits; m != 0 {
			return p + bits.TrailingZeros64(m)>>3
		}
		p += 8
	}
	for p < len(s) && s[p] != comma && s[p] != '"' && s[p] != '\n' {
		p++
	}
	return p
}

// trimLine drops the end of a line, which a message may still carry.
func trimLine(line []byte) []byte {
	line = bytes.TrimSuffix(line, []byte("\n"))
	return bytes.TrimSuffix(line, []byte("\r"))
}

// valid checks that the line is UTF-8.
func (d *CSV) valid(line []byte) bool {
	if utf8.Valid(line) {
		return true
	}
	at := 0
	for {
		r, n := utf8.DecodeRune(line[at:])
		if r == utf8.RuneError && n == 1 {
			return d.fail(UTF8, at, notUTF8)
		}
		at += n
	}
}

// fail notes the fault and returns false, for its callers to return.
func (d *CSV) fail(kind FaultKind, at int, why string) bool {
	d.fault = Fault{Kind: kind, Offset: at, Why: why}
	return false
}
