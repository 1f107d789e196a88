package moment

import (
	"errors"
	"math"
	"math/big"
	"math/rand/v2"
	"testing"

	"pgregory.net/rapid"
)

func mustShape(t testing.TB, components int, pairs [][2]int, triples [][3]int) *Shape {
	t.Helper()
	s, err := NewShape(components, pairs, triples)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// fullShape keeps every pair and triple.
func fullShape(t testing.TB, k int) *Shape {
	var pairs [][2]int
	var triples [][3]int
	for i := range k {
		for j := range i + 1 {
			pairs = append(pairs, [2]int{i, j})
			for l := range j + 1 {
				triples = append(triples, [3]int{i, j, l})
			}
		}
	}
	return mustShape(t, k, pairs, triples)
}

func fill(t testing.TB, s *Shape, origin []float64, rows [][]float64) *Cell {
	t.Helper()
	c := NewCell(s)
	if origin != nil {
		if err := c.SetOrigin(origin); err != nil {
			t.Fatal(err)
		}
	}
	for _, z := range rows {
		if !c.Add(z) {
			t.Fatalf("refused %v", z)
		}
	}
	return c
}

func column(xs []float64) [][]float64 {
	rows := make([][]float64, len(xs))
	for i, x := range xs {
		rows[i] = []float64{x}
	}
	return rows
}

func near(t *testing.T, what string, got, want, rel float64) {
	t.Helper()
	if !(math.Abs(got-want) <= rel*math.Abs(want)) {
		t.Errorf("%s = %.17g, want %.17g", what, got, want)
	}
}

// By hand: (4, 7, 13, 16) has mean 10 and squared deviations 36+9+9+36.
func TestSmallCell(t *testing.T) {
	for _, offset := range []float64{0, 1e9} {
		s := fullShape(t, 1)
		c := fill(t, s, nil, column([]float64{offset + 4, offset + 7, offset + 13, offset + 16}))
		near(t, "mean", c.Mean(0), offset+10, 0)
		near(t, "squares", c.Co(0, 0), 90, 0)
		near(t, "cubes", c.Third(0, 0, 0), 0, 0)
		c.Retract([]float64{offset + 13})
		near(t, "mean without 13", c.Mean(0), offset+9, 0)
		near(t, "squares without 13", c.Co(0, 0), 78, 0)
		c.Add([]float64{offset + 13})
		c.Replace([]float64{offset + 13}, []float64{offset + 16})
		near(t, "mean with 16 for 13", c.Mean(0), offset+10.75, 0)
		near(t, "squares with 16 for 13", c.Co(0, 0), 114.75, 0)
	}
}

// Third moment and squares of (1, 2, 4, 8, 16) computed with numpy 1.24.2.
func TestMergedParts(t *testing.T) {
	s := fullShape(t, 1)
	whole := fill(t, s, nil, column([]float64{1, 2, 4, 8, 16}))
	for _, origin := range []float64{0, 5, -0.1} {
		c := fill(t, s, nil, column([]float64{1, 2}))
		if err := c.Merge(fill(t, s, []float64{origin}, column([]float64{4, 8, 16}))); err != nil {
			t.Fatal(err)
		}
		near(t, "mean", c.Mean(0), 6.2, 1e-15)
		near(t, "squares", c.Co(0, 0), 148.8, 1e-15)
		near(t, "cubes", c.Third(0, 0, 0), 721.68, 1e-15)
		if origin == 0 && !c.Equal(whole) {
			t.Error("parts about one origin differ from the whole")
		}
	}
}

// Centred updating loses 5 digits or more here (Chan, Golub, LeVeque 1983, Am.
// Statistician 37:242, on the error; the sizes are ours): 100,000 values about mu, of
// which all but a few are retracted in another order.
func TestRetractionLosesNothing(t *testing.T) {
	for _, tt := range []struct {
		mu         float64
		keep       int
		kept, from float64 // tolerances: relative to exact, with origin 0 and with a near one
	}{
		{0, 1000, 1e-15, 1e-15},
		{1e6, 1000, 1e-14, 1e-15},
		{1e6, 10, 1e-12, 1e-15},
	} {
		rng := rand.New(rand.NewPCG(2, uint64(tt.keep)))
		rows := make([][]float64, 100000)
		for i := range rows {
			rows[i] = []float64{tt.mu + rng.NormFloat64()}
		}
		want, _ := exactCo(rows[:tt.keep], 0, 0).Float64()
		for _, origin := range []float64{0, rows[0][0]} {
			c := fill(t, fullShape(t, 1), []float64{origin}, rows)
			for _, i := range rng.Perm(len(rows) - tt.keep) {
				c.Retract(rows[tt.keep+i])
			}
			tolerance := tt.kept
			if origin != 0 {
				tolerance = tt.from
			}
			if c.Units() != int64(tt.keep) {
				t.Fatalf("%d units left", c.Units())
			}
			near(t, "squares left", c.Co(0, 0), want, tolerance)
		}
	}
}

// Products that fill more than 106 bits, in another order, leave a residue in the
// sums; it must not outlive the units.
func TestEmptiedCellIsAsNew(t *testing.T) {
	rng := rand.New(rand.NewPCG(12, 12))
	s := fullShape(t, 2)
	rows := make([][]float64, 500)
	for i := range rows {
		rows[i] = []float64{math.Exp(20 * rng.NormFloat64()), rng.NormFloat64()}
	}
	c := fill(t, s, nil, rows)
	order := rng.Perm(len(rows))
	for _, i := range order[1:] {
		c.Retract(rows[i])
	}
	alone := fill(t, s, nil, [][]float64{rows[order[0]]})
	if c.Equal(alone) {
		t.Fatal("no residue to begin with: the case is too easy")
	}
	c.Retract(rows[order[0]])
	if !c.Equal(NewCell(s)) {
		t.Errorf("emptied: %+v", c)
	}
}

// One wild value added and retracted: centred updating returns 896 for 945.8.
func TestWildValueLeavesNoTrace(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 3))
	rows := make([][]float64, 1000)
	for i := range rows {
		rows[i] = []float64{rng.NormFloat64()}
	}
	c := fill(t, mustShape(t, 1, [][2]int{{0, 0}}, nil), nil, rows)
	before := c.Co(0, 0)
	c.Add([]float64{1e9})
	c.Retract([]float64{1e9})
	near(t, "squares", c.Co(0, 0), before, 1e-14)
}

// exactCo and exactThird are centred moments in exact arithmetic.
func exactCo(rows [][]float64, i, j int) *big.Float {
	return exactMoment(rows, i, j)
}

func exactMoment(rows [][]float64, index ...int) *big.Float {
	n := new(big.Float).SetPrec(precise).SetInt64(int64(len(rows)))
	mean := make([]*big.Float, len(index))
	for at, i := range index {
		mean[at] = new(big.Float).SetPrec(precise)
		for _, z := range rows {
			mean[at].Add(mean[at], exactly(z[i]))
		}
		mean[at].Quo(mean[at], n)
	}
	sum := new(big.Float).SetPrec(precise)
	for _, z := range rows {
		p := exactly(1)
		for at, i := range index {
			p.Mul(p, new(big.Float).SetPrec(precise).Sub(exactly(z[i]), mean[at]))
		}
		sum.Add(sum, p)
	}
	return sum
}

// Any history of additions, retractions, replacements and merges leaves the moments
// of the units that remain.
func TestAnyHistoryLeavesTheMomentsOfWhatRemains(t *testing.T) {
	const k = 3
	s := fullShape(t, k)
	rapid.Check(t, func(t *rapid.T) {
		scale := []float64{1, rapid.SampledFrom([]float64{1e-6, 1, 1e6}).Draw(t, "scale"), 100}
		shift := []float64{0, rapid.SampledFrom([]float64{0, 1e3}).Draw(t, "shift") * scale[1], 40}
		vector := func(label string) []float64 {
			z := make([]float64, k)
			for i := range z {
				if rapid.IntRange(0, 3).Draw(t, label+" zero") > 0 {
					z[i] = shift[i] + scale[i]*rapid.Float64Range(-2, 5).Draw(t, label)
				}
			}
			return z
		}
		cell := func(label string) *Cell {
			c := NewCell(s)
			if rapid.Bool().Draw(t, label+" has origin") {
				if err := c.SetOrigin(vector(label + " origin")); err != nil {
					t.Fatal(err)
				}
			}
			return c
		}
		c := cell("cell")
		var rows [][]float64
		for range rapid.IntRange(0, 40).Draw(t, "steps") {
			switch rapid.IntRange(0, 5).Draw(t, "step") {
			case 0, 1, 2:
				z := vector("added")
				c.Add(z)
				rows = append(rows, z)
			case 3:
				if len(rows) > 0 {
					at := rapid.IntRange(0, len(rows)-1).Draw(t, "retracted")
					c.Retract(rows[at])
					rows = append(rows[:at:at], rows[at+1:]...)
				}
			case 4:
				if len(rows) > 0 {
					at := rapid.IntRange(0, len(rows)-1).Draw(t, "replaced")
					z := append([]float64(nil), rows[at]...)
					i := rapid.IntRange(0, k-1).Draw(t, "component")
					z[i] = vector("new")[i]
					c.Replace(rows[at], z)
					rows[at] = z
				}
			case 5:
				o := cell("other")
				for range rapid.IntRange(0, 5).Draw(t, "other size") {
					z := vector("merged")
					o.Add(z)
					rows = append(rows, z)
				}
				if err := c.Merge(o); err != nil {
					t.Fatal(err)
				}
			}
		}
		if c.Units() != int64(len(rows)) {
			t.Fatalf("%d units, want %d", c.Units(), len(rows))
		}
		if len(rows) == 0 {
			fresh := NewCell(s)
			fresh.origin = c.origin
			if !c.Equal(fresh) || !math.IsNaN(c.Mean(0)) {
				t.Fatalf("an emptied cell is not as new: %+v", c)
			}
			return
		}
		// Sums are good to 2^-100 of their largest term, so a centred moment is to
		// that of the powers of the largest score, and else to the last bit.
		largest := func(i int) float64 { return 10*scale[i] + math.Abs(shift[i]) }
		check := func(what string, got float64, want *big.Float, noise float64) {
			w, _ := want.Float64()
			if !(math.Abs(got-w) <= 1e-15*math.Abs(w)+0x1p-90*noise) {
				t.Fatalf("%s = %.17g, want %.17g (%d units)", what, got, w, len(rows))
			}
		}
		for i := range k {
			mean := exactly(0)
			for _, z := range rows {
				mean.Add(mean, exactly(z[i]))
			}
			check("mean", c.Mean(i), mean.Quo(mean, exactly(float64(len(rows)))), largest(i))
			for j := range k {
				check("co-moment", c.Co(i, j), exactMoment(rows, i, j), largest(i)*largest(j))
				for l := range k {
					check("third moment", c.Third(i, j, l), exactMoment(rows, i, j, l), largest(i)*largest(j)*largest(l))
				}
			}
		}
	})
}

func TestLaws(t *testing.T) {
	s := fullShape(t, 2)
	rng := rand.New(rand.NewPCG(4, 4))
	cents := func(n int) (rows [][]float64) {
		for range n {
			rows = append(rows, []float64{float64(rng.IntN(1 << 20)), float64(rng.IntN(1<<16)) / 4})
		}
		return rows
	}
	merged := func(parts ...*Cell) *Cell {
		c := NewCell(s)
		for _, p := range parts {
			before := NewCell(s)
			before.CopyFrom(p)
			if err := c.Merge(p); err != nil {
				t.Fatal(err)
			}
			if !p.Equal(before) {
				t.Fatal("merge changed its argument")
			}
		}
		return c
	}
	for range 200 {
		a, b, d := fill(t, s, nil, cents(rng.IntN(30))), fill(t, s, nil, cents(rng.IntN(30))), fill(t, s, nil, cents(rng.IntN(30)))
		if !merged(a, b, d).Equal(merged(d, merged(b, a))) {
			t.Fatal("merging in another order gives other bits")
		}
		if !merged(a, NewCell(s)).Equal(a) {
			t.Fatal("merging an empty cell changed something")
		}
	}
	if c := NewCell(fullShape(t, 3)); !errors.Is(c.Merge(NewCell(s)), ErrShape) {
		t.Fatal("cells of different shapes merged")
	}
	same := NewCell(fullShape(t, 2))
	if err := same.Merge(fill(t, s, nil, cents(3))); err != nil {
		t.Fatalf("equal shapes made twice: %v", err)
	}
}

// A tenth is not representable, its square needs 106 bits, and a million of them
// more than a Sum has: the residue must not pass for spread.
func TestEqualScoresHaveNoSpread(t *testing.T) {
	s := fullShape(t, 2)
	c := NewCell(s)
	for range 1_000_000 {
		c.Add([]float64{0.1, 0.3})
	}
	for _, p := range s.Pairs() {
		if got := c.Co(p[0], p[1]); got != 0 {
			t.Errorf("co-moment %v of equal scores is %g", p, got)
		}
	}
	// One score in a thousand that differs by a part in 10^12 is spread.
	c = NewCell(s)
	for range 1000 {
		c.Add([]float64{1, 1})
	}
	c.Add([]float64{1 + 0x1p-40, 1})
	near(t, "squares of one small difference", c.Co(0, 0), 0x1p-80*1000/1001, 1e-3)
}

func TestUnusableScoresChangeNothing(t *testing.T) {
	s := fullShape(t, 2)
	c := fill(t, s, nil, [][]float64{{1, 2}, {3, 5}})
	want := NewCell(s)
	want.CopyFrom(c)
	for _, bad := range []float64{math.NaN(), math.Inf(1), math.Inf(-1), Limit, -Limit} {
		if c.Add([]float64{1, bad}) || c.Retract([]float64{bad, 1}) || c.Replace([]float64{1, 2}, []float64{1, bad}) || c.Replace([]float64{bad, 2}, []float64{1, 2}) {
			t.Errorf("took %g", bad)
		}
	}
	empty := NewCell(s)
	if empty.Retract([]float64{1, 2}) || empty.Replace([]float64{1, 2}, []float64{1, 2}) || empty.Units() != 0 {
		t.Error("took something from an empty cell")
	}
	if !c.Equal(want) {
		t.Error("a refused score left a trace")
	}
	if err := c.SetOrigin([]float64{1, 1}); err == nil {
		t.Error("moved the origin of a cell with units")
	}
	if err := empty.SetOrigin([]float64{1}); err == nil {
		t.Error("took a short origin")
	}
	big := math.Nextafter(Limit, 0)
	c.Add([]float64{big, -big})
	if x := c.Third(0, 0, 1); math.IsNaN(x) || math.IsInf(x, 0) {
		t.Errorf("third moment at the limit: %g", x)
	}
}

func TestShape(t *testing.T) {
	s := mustShape(t, 4, [][2]int{{3, 1}, {1, 3}, {0, 0}}, [][3]int{{2, 0, 2}})
	wantPairs := [][2]int{{0, 0}, {0, 2}, {1, 3}, {2, 2}}
	if got := s.Pairs(); len(got) != len(wantPairs) {
		t.Fatalf("pairs %v, want %v", got, wantPairs)
	}
	for at, p := range wantPairs {
		if s.Pairs()[at] != p || s.Pair(p[0], p[1]) != at || s.Pair(p[1], p[0]) != at {
			t.Errorf("pair %v is at %d", p, s.Pair(p[0], p[1]))
		}
	}
	if s.Pair(1, 1) != -1 || s.Triple(0, 0, 2) != -1 {
		t.Error("found what is not kept")
	}
	for _, q := range [][3]int{{0, 2, 2}, {2, 0, 2}, {2, 2, 0}} {
		if s.Triple(q[0], q[1], q[2]) != 0 {
			t.Errorf("triple %v not found", q)
		}
	}
	for _, err := range []error{
		second(NewShape(0, nil, nil)), second(NewShape(257, nil, nil)),
		second(NewShape(2, [][2]int{{0, 2}}, nil)), second(NewShape(2, nil, [][3]int{{0, -1, 0}})),
	} {
		if err == nil {
			t.Error("accepted a shape that cannot be")
		}
	}
}

func second[T any](_ T, err error) error { return err }

func TestNothingIsAllocatedPerUnit(t *testing.T) {
	s := fullShape(t, 4)
	c, o := NewCell(s), fill(t, s, []float64{1, 0, 0, 0}, [][]float64{{1, 2, 3, 4}})
	z, y := []float64{1, 2, 3, 4}, []float64{1, 5, 3, 4}
	components, means, co := []int{0, 2, 3}, make([]float64, 3), make([]float64, 9)
	h, err := NewHeavy(4, 8)
	if err != nil {
		t.Fatal(err)
	}
	if n := testing.AllocsPerRun(100, func() {
		c.Add(z)
		c.Add(z)
		c.Replace(z, y)
		c.Retract(y)
		if err := c.Merge(o); err != nil {
			t.Fatal(err)
		}
		c.Means(components, means)
		c.Comoments(components, co)
		c.Third(0, 1, 2)
		h.Add(Unit{1}, z)
		h.Focus(y, z)
		h.Largest(z, y)
	}); n != 0 {
		t.Errorf("%g allocations", n)
	}
}

// go test ./online/moment -run '^$' -bench . -count 5
func BenchmarkCell(b *testing.B) {
	s := mustShape(b, 6, [][2]int{{0, 0}, {0, 1}, {1, 1}, {2, 2}, {3, 3}, {4, 4}, {4, 5}, {5, 5}}, nil)
	z, y := []float64{12.5, 3, 1, 0, 77, 2}, []float64{13.5, 4, 1, 0, 77, 2}
	c := fill(b, s, nil, [][]float64{z, y})
	b.Run("op=add", func(b *testing.B) {
		for b.Loop() {
			c.Add(z)
		}
	})
	b.Run("op=replace", func(b *testing.B) {
		for b.Loop() {
			c.Replace(z, y)
		}
	})
	b.Run("op=co", func(b *testing.B) {
		for b.Loop() {
			c.Co(0, 1)
		}
	})
}

func BenchmarkSum(b *testing.B) {
	var s Sum
	b.Run("op=add", func(b *testing.B) {
		for b.Loop() {
			s.Add(1.25)
		}
	})
	b.Run("op=product", func(b *testing.B) {
		for b.Loop() {
			s.AddProduct(1.25, 3.5)
		}
	})
}
