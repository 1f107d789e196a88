package online

import (
	"time"

	"stillwell/online/wire"
)

// A window holds the sums of the units that became complete in the last so and so long. It
// slides by steps: each step's sums are added once and taken away once, at a cost that
// depends neither on its units nor on the window's length.
type window struct {
	span  time.Duration
	sums  *strata
	steps []stepSums // oldest first; the last one is still being gathered while at is NoTime
}

type stepSums struct {
	at   int64 // the step's end; NoTime until it is over
	sums *strata
}

// newWindows makes a window of each length that an estimate asks for.
func (l *ledger) newWindows() []*window {
	var out []*window
	for i := range l.s.Estimates {
		span := l.s.Estimates[i].Window
		if span > 0 && windowOf(out, span) == nil {
			out = append(out, &window{span: span, sums: newStrata(l.l.provisional)})
		}
	}
	return out
}

func windowOf(ws []*window, span time.Duration) *window {
	for _, w := range ws {
		if w.span == span {
			return w
		}
	}
	return nil
}

// add joins a unit that became complete in the step under way.
func (w *window) add(u *unit) {
	if n := len(w.steps); n == 0 || w.steps[n-1].at != NoTime {
		w.steps = append(w.steps, stepSums{NoTime, newStrata(w.sums.shape)})
	}
	w.steps[len(w.steps)-1].sums.at(u.Power).Add(u.z)
}

// slide closes the step at T and lets go of the steps that the window has passed. It tells
// whether anything has changed.
func (w *window) slide(T int64) bool {
	moved := false
	if n := len(w.steps); n > 0 && w.steps[n-1].at == NoTime {
		w.steps[n-1].at = T
		w.sums.merge(w.steps[n-1].sums)
		moved = true
	}
	for len(w.steps) > 0 && w.steps[0].at <= T-int64(w.span) {
		w.sums.unmerge(w.steps[0].sums)
		w.steps = w.steps[1:]
		moved = true
	}
	return moved
}

// must holds for sums that this package made of one layout.
func must(err error) {
	if err != nil {
		panic(err)
	}
}

// due is when the window next lets go of a step.
func (w *window) due() (int64, bool) {
	if len(w.steps) == 0 || w.steps[0].at == NoTime {
		return 0, false
	}
	return w.steps[0].at + int64(w.span), true
}

func (w *window) encode(to *wire.Writer) {
	w.sums.encode(to)
	to.U64(uint64(len(w.steps)))
	for _, s := range w.steps {
		to.I64(s.at)
		s.sums.encode(to)
	}
}

func (w *window) decode(r *wire.Reader) {
	w.sums.decode(r)
	for range r.Count(2) {
		if r.Err() != nil {
			return
		}
		s := stepSums{r.I64(), newStrata(w.sums.shape)}
		s.sums.decode(r)
		w.steps = append(w.steps, s)
	}
}
