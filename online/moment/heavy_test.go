package moment

import (
	"bytes"
	"encoding/binary"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

func mustHeavy(t testing.TB, width, room int) *Heavy {
	t.Helper()
	h, err := NewHeavy(width, room)
	if err != nil {
		t.Fatal(err)
	}
	return h
}

func randomUnit(rng *rand.Rand) (u Unit) {
	binary.LittleEndian.PutUint64(u[:], rng.Uint64())
	binary.LittleEndian.PutUint64(u[8:], rng.Uint64())
	return u
}

type row struct {
	u Unit
	z []float64
}

func randomRows(rng *rand.Rand, n, width int) []row {
	rows := make([]row, n)
	for i := range rows {
		rows[i] = row{randomUnit(rng), make([]float64, width)}
		for j := range width {
			// Few distinct values, so that ties occur, and a heavy tail.
			rows[i].z[j] = math.Round(10 * math.Exp(rng.NormFloat64()))
		}
	}
	return rows
}

// plainLargest looks at every row.
func plainLargest(rows []row, weight, centre []float64) (u Unit, psi float64) {
	best := -1.0
	for _, r := range rows {
		x := dot(weight, centre, r.z)
		if a := math.Abs(x); a > best || a == best && bytes.Compare(r.u[:], u[:]) < 0 {
			u, psi, best = r.u, x, a
		}
	}
	return u, psi
}

func feed(t *testing.T, h *Heavy, rows []row) {
	for _, r := range rows {
		if !h.Add(r.u, r.z) {
			t.Fatalf("refused %v", r.z)
		}
	}
}

func vectors(rng *rand.Rand, width int) (weight, centre []float64) {
	for range width {
		weight = append(weight, rng.NormFloat64())
		centre = append(centre, 10+rng.NormFloat64())
	}
	return weight, centre
}

func TestHeavyIsExactWhileAllFit(t *testing.T) {
	rng := rand.New(rand.NewPCG(6, 6))
	for range 300 {
		rows := randomRows(rng, 1+rng.IntN(32), 3)
		h := mustHeavy(t, 3, 32)
		feed(t, h, rows)
		weight, centre := vectors(rng, 3)
		wantUnit, want := plainLargest(rows, weight, centre)
		if u, got, ok := h.Largest(weight, centre); !ok || !h.Exact() || u != wantUnit || got != want {
			t.Fatalf("largest of %d is %g of %x, want %g of %x", len(rows), got, u, want, wantUnit)
		}
	}
}

// With one score the largest influence is at an extreme, whatever was focused on.
func TestHeavyIsExactForOneScore(t *testing.T) {
	rng := rand.New(rand.NewPCG(7, 7))
	rows := randomRows(rng, 5000, 3)
	h := mustHeavy(t, 3, 4)
	feed(t, h, rows)
	for i := range 3 {
		for _, at := range []float64{0, 10, 1e4} {
			weight, centre := make([]float64, 3), []float64{at, at, at}
			weight[i] = -2
			wantUnit, want := plainLargest(rows, weight, centre)
			if u, got, ok := h.Largest(weight, centre); !ok || u != wantUnit || got != want {
				t.Errorf("score %d about %g: %g of %x, want %g of %x", i, at, got, u, want, wantUnit)
			}
		}
	}
}

func TestHeavyKeepsTheTopUnderAnUnchangedFocus(t *testing.T) {
	rng := rand.New(rand.NewPCG(8, 8))
	rows := randomRows(rng, 3000, 2)
	weight, centre := []float64{0.5, -1.5}, []float64{16, 17}
	scaled := []float64{-1, 3}
	var first *Heavy
	for range 3 {
		h := mustHeavy(t, 2, 32)
		h.Focus(weight, centre)
		feed(t, h, rows)
		wantUnit, want := plainLargest(rows, scaled, centre)
		if u, got, _ := h.Largest(scaled, centre); u != wantUnit || got != want {
			t.Fatalf("largest %g of %x, want %g of %x", got, u, want, wantUnit)
		}
		// The set kept is the top 32 by reach, then name, in whatever order they came.
		sorted := slices.Clone(rows)
		slices.SortFunc(sorted, func(a, b row) int {
			x, y := reach(weight, centre, a.z), reach(weight, centre, b.z)
			if x == y {
				return bytes.Compare(a.u[:], b.u[:])
			}
			if x > y {
				return -1
			}
			return 1
		})
		for _, r := range sorted[:32] {
			if !slices.Contains(h.units, r.u) {
				t.Fatalf("unit %x with reach %g was let go", r.u, reach(weight, centre, r.z))
			}
		}
		if first == nil {
			first = h
		}
		for at := range first.extremeUnits {
			if first.extremeUnits[at] != h.extremeUnits[at] {
				t.Fatal("extremes depend on the order")
			}
		}
		rng.Shuffle(len(rows), func(i, j int) { rows[i], rows[j] = rows[j], rows[i] })
	}
}

// A gradient that drifts as an estimate settles, with a focus now and then, finds the
// heaviest unit all the same.
func TestHeavyFollowsADriftingGradient(t *testing.T) {
	rng := rand.New(rand.NewPCG(9, 9))
	rows := randomRows(rng, 20000, 2)
	h := mustHeavy(t, 2, 32)
	c := NewCell(mustShape(t, 2, nil, nil))
	ratio := func() (weight, centre []float64) {
		y, w := c.Mean(0), c.Mean(1)
		return []float64{1 / w, -y / (w * w)}, []float64{y, w}
	}
	for i, r := range rows {
		c.Add(r.z)
		h.Add(r.u, r.z)
		if i < 40 || i%500 == 0 {
			h.Focus(ratio())
		}
	}
	weight, centre := ratio()
	wantUnit, want := plainLargest(rows, weight, centre)
	if u, got, _ := h.Largest(weight, centre); u != wantUnit || got != want {
		t.Errorf("largest %g of %x, want %g of %x", got, u, want, wantUnit)
	}
}

func TestHeavyEdges(t *testing.T) {
	h := mustHeavy(t, 1, 2)
	if _, _, ok := h.Largest([]float64{1}, []float64{0}); ok {
		t.Error("an empty set named a unit")
	}
	if h.Add(Unit{}, []float64{math.NaN()}) || h.Seen() != 0 {
		t.Error("took a score that is no number")
	}
	h.Add(Unit{1}, []float64{3})
	h.Focus([]float64{math.Inf(1)}, []float64{0})
	if h.weight[0] != 0 {
		t.Error("took a weight that is not finite")
	}
	for _, err := range []error{second(NewHeavy(0, 1)), second(NewHeavy(1, 0)), second(NewHeavy(300, 1))} {
		if err == nil {
			t.Error("made a set that cannot be")
		}
	}
}
