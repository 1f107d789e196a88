package prometheus

// A table keeps a value for each set of labels that has come, up to a number of them: the
// first to come stay.
type table[V any] struct {
	max     int
	empty   V              // what a new row begins with
	index   map[string]int // key -> row; -1 for one that found no place
	rows    []row[V]
	dropped int // keys without a place now
}

// row is a set of labels, which never changes, and its latest value.
type row[V any] struct {
	labels []string
	v      V
}

func newTable[V any](max int, empty V) table[V] {
	return table[V]{max: max, empty: empty, index: map[string]int{}}
}

// at is the value of a key, good until the next call; nil where the table is full, unless the
// key must have a place.
func (t *table[V]) at(key []byte, must bool) *V {
	i, known := t.index[string(key)]
	switch {
	case known && i >= 0:
		return &t.rows[i].v
	case !must && len(t.rows) >= t.max:
		if !known {
			t.index[string(key)] = -1
			t.dropped++
		}
		return nil
	case known:
		t.dropped--
	}
	t.index[string(key)] = len(t.rows)
	t.rows = append(t.rows, row[V]{splitKey(key), t.empty})
	return &t.rows[len(t.rows)-1].v
}
