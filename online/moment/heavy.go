package moment

import (
	"bytes"
	"fmt"
	"math"
	"slices"
)

// A Unit is the opaque name of a unit.
type Unit [16]byte

// Heavy remembers those units of a cell that are likely to carry most of an
// estimate's variance, so that the largest single share can be told without the
// rows. It keeps
//
//   - the room units with the largest |w.(z - c)|, where w and c are the weights
//     and centre last given to Focus; equal ones by the smaller name; and
//   - for each component the unit with the smallest and with the largest score.
//
// Units can only be added. As long as no more than room were, Largest is exact; so
// it is at any number of units when one weight alone is not zero, since the largest
// influence is then at an extreme score. Else it is a lower bound, and exact too
// when the weights asked for are proportional to those of an unchanged Focus with
// the same centre. Before the first Focus all units beyond room weigh the same, so
// focus as soon as there is a gradient. Same units in the same order with the same
// calls to Focus give the same bytes.
type Heavy struct {
	width, room    int
	seen           int64
	weight, centre []float64 // of the last Focus

	units  []Unit    // those kept, in no order
	scores []float64 // width for each of units
	reach  []float64 // |w.(z - c)| of each
	least  int       // the one to go next

	extremeUnits  []Unit    // smallest then largest by component; meaningful once seen > 0
	extremeScores []float64 // width for each
}

// NewHeavy returns an empty set for score vectors of the given width.
//
//	in     width 1 to 256, room >= 1
//	error  names the argument
func NewHeavy(width, room int) (*Heavy, error) {
	if width < 1 || width > maxComponents || room < 1 {
		return nil, fmt.Errorf("moment: heavy set of width %d with room for %d, want 1 to %d and at least 1", width, room, maxComponents)
	}
	return &Heavy{
		width: width, room: room,
		weight: make([]float64, width), centre: make([]float64, width),
		units: make([]Unit, 0, room), scores: make([]float64, 0, room*width), reach: make([]float64, 0, room),
		extremeUnits: make([]Unit, 2*width), extremeScores: make([]float64, 2*width*width),
	}, nil
}

// Seen returns the number of units added.
func (h *Heavy) Seen() int64 { return h.seen }

// Exact reports whether every unit added is still kept.
func (h *Heavy) Exact() bool { return h.seen <= int64(h.room) }

// Add offers a unit with scores z. It reports false, and changes nothing, when z is
// not Usable.
func (h *Heavy) Add(u Unit, z []float64) bool {
	if len(z) != h.width {
		panic(fmt.Sprintf("moment: %d scores for a heavy set of width %d", len(z), h.width))
	}
	if !Usable(z) {
		return false
	}
	h.offerExtremes(u, z)
	h.seen++
	r := reach(h.weight, h.centre, z)
	switch {
	case len(h.units) < h.room:
		h.units = append(h.units, u)
		h.scores = append(h.scores, z...)
		h.reach = append(h.reach, r)
	case heavier(r, u, h.reach[h.least], h.units[h.least]):
		h.units[h.least] = u
		copy(h.scores[h.least*h.width:], z)
		h.reach[h.least] = r
	default:
		return true
	}
	h.findLeast()
	return true
}

func (h *Heavy) offerExtremes(u Unit, z []float64) {
	for i, x := range z {
		for side, sign := range [2]float64{-1, 1} {
			at := 2*i + side
			kept := h.extreme(at)
			if h.seen == 0 || heavier(sign*x, u, sign*kept[i], h.extremeUnits[at]) {
				h.extremeUnits[at] = u
				copy(kept, z)
			}
		}
	}
}

// Focus sets the weights and centre under which units compete from now on, and
// ranks those kept anew; what was let go is gone. It changes nothing when a number
// is not Usable.
func (h *Heavy) Focus(weight, centre []float64) {
	if len(weight) != h.width || len(centre) != h.width {
		panic(fmt.Sprintf("moment: focus of %d weights and %d centres on a heavy set of width %d", len(weight), len(centre), h.width))
	}
	if !Usable(weight) || !Usable(centre) {
		return
	}
	copy(h.weight, weight)
	copy(h.centre, centre)
	for i := range h.units {
		h.reach[i] = reach(weight, centre, h.kept(i))
	}
	h.findLeast()
}

// Largest returns the unit kept with the largest |w.(z - c)|, and that value with
// its sign; ok is false when there is none.
func (h *Heavy) Largest(weight, centre []float64) (u Unit, psi float64, ok bool) {
	best := -1.0
	try := func(name Unit, z []float64) {
		x := dot(weight, centre, z)
		if heavier(math.Abs(x), name, best, u) {
			u, psi, best, ok = name, x, math.Abs(x), true
		}
	}
	for i, name := range h.units {
		try(name, h.kept(i))
	}
	if h.seen > 0 {
		for i, name := range h.extremeUnits {
			try(name, h.extreme(i))
		}
	}
	return u, psi, ok
}

func (h *Heavy) kept(i int) []float64    { return h.scores[i*h.width : (i+1)*h.width] }
func (h *Heavy) extreme(i int) []float64 { return h.extremeScores[i*h.width : (i+1)*h.width] }

func (h *Heavy) findLeast() {
	h.least = 0
	for i := range h.units {
		if heavier(h.reach[h.least], h.units[h.least], h.reach[i], h.units[i]) {
			h.least = i
		}
	}
}

// heavier orders by value, equal ones by the smaller name.
func heavier(x float64, u Unit, y float64, v Unit) bool {
	return x > y || x == y && bytes.Compare(u[:], v[:]) < 0
}

func dot(weight, centre, z []float64) float64 {
	var sum float64
	for i, w := range weight {
		if w != 0 {
			sum += float64(w * (z[i] - centre[i]))
		}
	}
	return sum
}

func reach(weight, centre, z []float64) float64 { return math.Abs(dot(weight, centre, z)) }

// Equal reports whether both hold the same state.
func (h *Heavy) Equal(o *Heavy) bool {
	return h.width == o.width && h.room == o.room && h.seen == o.seen &&
		slices.Equal(h.weight, o.weight) && slices.Equal(h.centre, o.centre) &&
		slices.Equal(h.units, o.units) && slices.Equal(h.scores, o.scores) &&
		slices.Equal(h.extremeUnits, o.extremeUnits) && slices.Equal(h.extremeScores, o.extremeScores)
}
