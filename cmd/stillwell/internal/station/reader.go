package station

import (
	"fmt"

	"stillwell/online"
	"stillwell/online/expr"
	"stillwell/stream"
	"stillwell/stream/decode"
	"stillwell/stream/order"
)

// Rules say how raw events are read.
type Rules struct {
	CSV      bool
	TimeSlot int // slot of the event-time field; -1: the broker's timestamp
	TimeSpec decode.TimeSpec
	IDSlot   int // -1: the stream has no ids
	Earliest int64
	Latest   int64 // times outside [Earliest, Latest) are malformed
	MaxLine  int
}

// A Reject is a malformed event, for inspection.
type Reject struct {
	Partition string
	Position  int64
	Fault     string
	Text      []byte
}

// A reader turns chunks of raw events into batches for the sequencer. One a worker.
type reader struct {
	plan    *online.Plan
	rules   Rules
	json    *decode.JSON
	csv     *decode.CSV
	header  []byte // the header that csv has
	headErr error
	rec     expr.Record
	rejects func(Reject)
}

func newReader(plan *online.Plan, rules Rules, rejects func(Reject)) (*reader, error) {
	var fields []decode.Field
	for slot, name := range plan.Fields.Names() {
		fields = append(fields, decode.Field{Path: name, Numeric: plan.Fields.Uses(slot)&expr.AsNumber != 0})
	}
	r := &reader{plan: plan, rules: rules, rec: make(expr.Record, len(fields)), rejects: rejects}
	if !rules.CSV {
		r.json = decode.NewJSON(fields)
		return r, nil
	}
	var err error
	r.csv, err = decode.NewCSV(fields, decode.CSVOptions{})
	return r, err
}

// read fills b with the events of a chunk.
func (r *reader) read(c *stream.Chunk, b *order.Batch) {
	b.Partition = c.Partition
	b.Start = stream.Position{Offset: c.Base, Mark: c.Mark}
	b.Next = stream.Position{Offset: c.Base + int64(len(c.Data)), Mark: c.Mark}
	if r.rules.CSV {
		r.setHeader(c.Header)
	}
	if c.Messages == nil {
		lines := decode.SplitLines(c.Data, c.Final)
		for {
			line, at, ok := lines.Next()
			if !ok {
				return
			}
			r.event(b, line, c.Base+int64(at), 0)
		}
	}
	if n := len(c.Messages); n > 0 {
		b.Start.Offset = c.Messages[0].Offset
		b.Next.Offset = c.Messages[n-1].Offset + 1
	}
	for i := range c.Messages {
		m := &c.Messages[i]
		r.event(b, c.Data[m.Start:m.End], m.Offset, m.Stamp)
	}
}

func (r *reader) setHeader(h []byte) {
	if string(h) != string(r.header) || r.header == nil {
		r.header = append(r.header[:0], h...)
		r.headErr = r.csv.Header(h)
	}
}

func (r *reader) event(b *order.Batch, line []byte, position, stamp int64) {
	var err error
	switch {
	case len(line) > r.rules.MaxLine:
		err = fmt.Errorf("longer than %d bytes", r.rules.MaxLine)
	case r.csv != nil && r.headErr != nil:
		err = r.headErr
	case r.csv != nil:
		err = r.csv.Decode(line, r.rec)
	default:
		err = r.json.Decode(line, r.rec)
	}
	if err != nil {
		r.malformed(b, line, position, err)
		return
	}
	at := stamp
	if r.rules.TimeSlot >= 0 {
		t, fault := decode.ParseTime(r.rec[r.rules.TimeSlot], r.rules.TimeSpec)
		if fault != nil {
			r.malformed(b, line, position, fault)
			return
		}
		at = t
	}
	if at < r.rules.Earliest || at >= r.rules.Latest {
		r.malformed(b, line, position, errAbsurdTime)
		return
	}
	var id []byte
	if r.rules.IDSlot >= 0 {
		id = r.rec[r.rules.IDSlot].Text
	}
	b.Event(at, stamp, position, id)
	arena, fault := r.plan.Project(r.rec, at, b.Arena())
	if fault != nil {
		b.Retract()
		r.malformed(b, line, position, fault)
		return
	}
	b.Keep(arena)
}

type constantError string

func (e constantError) Error() string { return string(e) }

const errAbsurdTime = constantError("the time is outside stream.between")

func (r *reader) malformed(b *order.Batch, line []byte, position int64, err error) {
	b.Malformed(position)
	if r.rejects != nil {
		r.rejects(Reject{b.Partition.Name, position, err.Error(), line})
	}
}
