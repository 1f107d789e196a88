package order

// ids remembers ids with the last time each was seen, in one open-addressing table.
// What is too old to be asked for makes room when the table would grow.
type ids struct {
	slots []seenID
	n     int
}

type seenID struct {
	id   [2]uint64 // id[1] is odd; 0 is an empty place
	last int64
}

func (t *ids) find(id [2]uint64) *seenID {
	mask := uint64(len(t.slots) - 1)
	for i := id[0] & mask; ; i = (i + 1) & mask {
		if s := &t.slots[i]; s.id == id || s.id[1] == 0 {
			return s
		}
	}
}

// has tells whether an id was seen at or after since.
func (t *ids) has(id [2]uint64, since int64) bool {
	if len(t.slots) == 0 {
		return false
	}
	s := t.find(id)
	return s.id[1] != 0 && s.last >= since
}

// seen is has, and remembers that the id was seen at the time.
func (t *ids) seen(id [2]uint64, at, since, forget int64) bool {
	t.room(forget)
	s := t.find(id)
	known := s.id[1] != 0 && s.last >= since
	t.set(s, id, at)
	return known
}

func (t *ids) note(id [2]uint64, at, forget int64) {
	t.room(forget)
	t.set(t.find(id), id, at)
}

func (t *ids) set(s *seenID, id [2]uint64, at int64) {
	if s.id[1] == 0 {
		*s = seenID{id, at}
		t.n++
		return
	}
	s.last = max(s.last, at)
}

// room makes a place for one more, without those last seen before forget.
func (t *ids) room(forget int64) {
	if 4*(t.n+1) <= 3*len(t.slots) {
		return
	}
	live := 0
	for i := range t.slots {
		if s := &t.slots[i]; s.id[1] != 0 && s.last >= forget {
			live++
		}
	}
	size := 1024
	for size < 3*(live+1) {
		size *= 2
	}
	old := t.slots
	t.slots, t.n = make([]seenID, size), 0
	for i := range old {
		if s := &old[i]; s.id[1] != 0 && s.last >= forget {
			*t.find(s.id) = *s
			t.n++
		}
	}
}
