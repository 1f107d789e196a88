package online

import "stillwell/online/units"

// queue is rows, first in, first out.
type queue struct {
	rows []units.Row
	head int
}

func (q *queue) push(r units.Row) { q.rows = append(q.rows, r) }

func (q *queue) first() (units.Row, bool) {
	if q.head == len(q.rows) {
		return units.None, false
	}
	return q.rows[q.head], true
}

func (q *queue) pop() (units.Row, bool) {
	r, ok := q.first()
	if !ok {
		return r, false
	}
	q.head++
	if q.head > 1024 && 2*q.head > len(q.rows) {
		q.rows = append(q.rows[:0], q.rows[q.head:]...)
		q.head = 0
	}
	return r, true
}

// emptied is a buffer for the next step, after one in which it held so many: a flood's is not
// kept for good.
func emptied[T any](s []T) []T {
	if cap(s) > 1024 && cap(s) > 8*len(s) {
		return nil
	}
	return s[:0]
}
