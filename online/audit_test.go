package online

import (
	"testing"
)

// TestAuditSeesDamage: a sum that is not that of the rows, a row that is not what was
// added, and a row that is gone without a trace.
func TestAuditSeesDamage(t *testing.T) {
	fill := func() *berth {
		b := newBerth(t, Limits{Units: 400, Rows: 600}, nil)
		for who := range 3000 {
			b.event(int64(who), who, true, float64(who%97)+.1)
			if who%60 == 59 {
				b.step(int64(who) + 1)
			}
		}
		for who := 2900; who < 3200; who++ { // since the step's end
			b.event(3000, who, who >= 3000, 5)
		}
		if off := b.audit(); off > 1e-14 {
			t.Errorf("sound sums are off by %g", off)
		}
		return b
	}
	b := fill()
	g := b.desk.studies[0].group(0, 0)
	if !g.all.mixed() {
		t.Error("nothing was sampled")
	}
	g.all.at(1).Add([]float64{1, 1})
	if b.audit() != 1 {
		t.Error("a unit too many was not seen")
	}
	b = fill()
	g = b.desk.studies[0].group(0, 0)
	g.all.at(0).Replace([]float64{1, 0}, []float64{1.0000001, 0})
	if off := b.audit(); off < 1e-12 || off > 1e-6 {
		t.Errorf("a sum too large by 1e-7 is off by %g", off)
	}
	for _, sh := range b.shards {
		p := sh.parts[0]
		if r, ok := p.queue.first(); ok {
			p.rows.Change(r)[0]++
			break
		}
	}
	if off := b.audit(); off < 1e-6 {
		t.Errorf("a row that changed is off by %g", off)
	}
}
