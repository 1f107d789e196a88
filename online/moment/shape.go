package moment

import (
	"encoding/binary"
	"errors"
	"fmt"
	"hash/fnv"
	"slices"
	"sort"
)

// ErrShape is wrapped where two cells, or a cell and its bytes, differ in shape.
var ErrShape = errors.New("shapes differ")

// maxComponents bounds a score vector, so that a pair fits in 16 bits.
const maxComponents = 256

// A Shape says which co-moments a cell keeps. It is fixed for life and shared by
// cells; safe for concurrent use.
type Shape struct {
	components int
	pairs      [][2]int // i <= j, ascending
	triples    [][3]int // i <= j <= k, ascending
	position   []int32  // of the pair (i, j) at i*components+j, either way round; -1 if not kept
	print      uint64   // tells shapes apart in stored bytes
}

// NewShape returns the shape of cells over vectors of so many components that
// keep the co-moments of the pairs and the third moments of the triples. Indices
// may come in any order and more than once. A triple brings its pairs, which
// centring it needs.
//
//	in     1 to 256 components; indices 0 to components-1
//	error  names the index that is out of range
func NewShape(components int, pairs [][2]int, triples [][3]int) (*Shape, error) {
	if components < 1 || components > maxComponents {
		return nil, fmt.Errorf("moment: %d components, want 1 to %d", components, maxComponents)
	}
	s := &Shape{components: components, position: make([]int32, components*components)}
	keep := func(i, j int) { s.pairs = append(s.pairs, [2]int{min(i, j), max(i, j)}) }
	for _, p := range pairs {
		if err := s.check(p[:]); err != nil {
			return nil, fmt.Errorf("moment: pair %v: %w", p, err)
		}
		keep(p[0], p[1])
	}
	for _, t := range triples {
		if err := s.check(t[:]); err != nil {
			return nil, fmt.Errorf("moment: triple %v: %w", t, err)
		}
		slices.Sort(t[:])
		keep(t[0], t[1])
		keep(t[0], t[2])
		keep(t[1], t[2])
		s.triples = append(s.triples, t)
	}
	slices.SortFunc(s.pairs, func(a, b [2]int) int { return slices.Compare(a[:], b[:]) })
	s.pairs = slices.Compact(s.pairs)
	slices.SortFunc(s.triples, func(a, b [3]int) int { return slices.Compare(a[:], b[:]) })
	s.triples = slices.Compact(s.triples)

	for i := range s.position {
		s.position[i] = -1
	}
	for at, p := range s.pairs {
		s.position[p[0]*components+p[1]] = int32(at)
		s.position[p[1]*components+p[0]] = int32(at)
	}
	s.print = s.fingerprint()
	return s, nil
}

func (s *Shape) check(index []int) error {
	for _, i := range index {
		if i < 0 || i >= s.components {
			return fmt.Errorf("index %d, want 0 to %d", i, s.components-1)
		}
	}
	return nil
}

func (s *Shape) fingerprint() uint64 {
	h := fnv.New64a()
	word := func(n int) { h.Write(binary.LittleEndian.AppendUint32(nil, uint32(n))) }
	word(s.components)
	word(len(s.pairs))
	for _, p := range s.pairs {
		word(p[0])
		word(p[1])
	}
	for _, t := range s.triples {
		word(t[0])
		word(t[1])
		word(t[2])
	}
	return h.Sum64()
}

// Components is the length of a score vector.
func (s *Shape) Components() int { return s.components }

// Pairs lists the pairs kept, i <= j, ascending; the caller must not change it.
func (s *Shape) Pairs() [][2]int { return s.pairs }

// Triples lists the triples kept, i <= j <= k, ascending; the caller must not change it.
func (s *Shape) Triples() [][3]int { return s.triples }

// Pair returns the position of (i, j) in Pairs, in either order, or -1.
func (s *Shape) Pair(i, j int) int { return int(s.position[i*s.components+j]) }

// Triple returns the position of (i, j, k) in Triples, in any order, or -1.
func (s *Shape) Triple(i, j, k int) int {
	if i > j {
		i, j = j, i
	}
	if j > k {
		j, k = k, j
	}
	if i > j {
		i, j = j, i
	}
	at := sort.Search(len(s.triples), func(m int) bool {
		t := &s.triples[m]
		if t[0] != i {
			return t[0] > i
		}
		if t[1] != j {
			return t[1] > j
		}
		return t[2] >= k
	})
	if at < len(s.triples) && s.triples[at] == [3]int{i, j, k} {
		return at
	}
	return -1
}

// same reports whether the two keep the same co-moments.
func (s *Shape) same(o *Shape) bool {
	return s == o || s.components == o.components &&
		slices.Equal(s.pairs, o.pairs) && slices.Equal(s.triples, o.triples)
}

// sums is the number of sums of a cell: first, second and third order in turn.
func (s *Shape) sums() int { return s.components + len(s.pairs) + len(s.triples) }
