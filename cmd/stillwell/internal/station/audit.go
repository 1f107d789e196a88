package station

import (
	"sync"
	"time"

	"go.uber.org/zap"

	"stillwell/online"
)

// auditEvery is the least time between two audits; each takes at most a hundredth of the time.
const auditEvery = 10 * time.Minute

// wrongBy is the relative difference from which sums and rows cannot both be right.
const wrongBy = 1e-9

// auditor compares the sums with the rows now and then.
type auditor struct {
	last time.Time
	took time.Duration
	off  map[string]float64 // study -> largest relative difference found last
}

// look audits at a step's end, if it is time to.
func (a *auditor) look(e *engine, log *zap.Logger) {
	if a.last.IsZero() {
		a.last = time.Now()
	}
	if time.Since(a.last) < max(auditEvery, 100*a.took) {
		return
	}
	start := time.Now()
	a.off = map[string]float64{}
	for _, s := range e.audit() {
		a.off[s.Study] = s.Off
		if !(s.Off <= wrongBy) {
			log.Error("sums and rows differ: one of them is damaged", zap.String("study", s.Study), zap.Float64("relative", s.Off), zap.Int64("units", s.Units))
		}
	}
	a.last, a.took = time.Now(), time.Since(start)
}

// audit recounts every shard's rows, and compares them with the desk's sums.
func (e *engine) audit() []online.Audited {
	counts := make([]online.Recount, len(e.shards))
	var wg sync.WaitGroup
	for w := range e.workers {
		wg.Go(func() {
			for i := w; i < len(e.shards); i += e.workers {
				counts[i] = e.shards[i].Recount()
			}
		})
	}
	wg.Wait()
	return e.desk.Audit(counts)
}
