// Package ferry makes the events of an invented ferry company's ticket site, the same for
// the same seed: passengers who come, are assigned to a seat map, look around, pay and
// buy, some of them often and dear; and a payment service that is slow now and then.
package ferry

import (
	"container/heap"
	"fmt"
	"math"
	"math/rand/v2"
	"strconv"
	"time"
)

// Config says what the site is like.
type Config struct {
	Seed       uint64
	From       time.Time
	PerHour    float64   // passengers who come in an hour, at the mean of the day
	Effect     float64   // of the wide seat map on the chance to buy, relative
	HeavyTail  float64   // sigma of the logarithm of fares; 0: 0.8
	SlowFrom   time.Time // the payment service is slower from then on; zero: never
	Disordered bool      // events come up to 90 s late, some twice
}

// A Site is a running stream of events. Not for concurrent use.
type Site struct {
	cfg    Config
	rng    *rand.Rand
	now    time.Time
	n      int
	id     int
	future events
}

// event is something that will happen.
type event struct {
	at   time.Time
	seen time.Time // when it reaches the stream
	line []byte
}

// New returns a site at its start.
func New(cfg Config) *Site {
	if cfg.HeavyTail == 0 {
		cfg.HeavyTail = 0.8
	}
	return &Site{cfg: cfg, rng: rand.New(rand.NewPCG(cfg.Seed, 0x5717)), now: cfg.From}
}

// Next returns the next line of the stream, without newline, and when it reaches it. The
// line is valid until the next call.
func (s *Site) Next() (line []byte, at time.Time) {
	for len(s.future) == 0 || s.future[0].seen.After(s.now) {
		s.arrive()
	}
	e := heap.Pop(&s.future).(event)
	return e.line, e.seen
}

// arrive lets one more passenger come, and plans what they will do.
func (s *Site) arrive() {
	hour := float64(s.now.Unix()%86400) / 3600
	rate := s.cfg.PerHour * (1 + 0.6*math.Sin((hour-9)/24*2*math.Pi))
	s.now = s.now.Add(time.Duration(s.rng.ExpFloat64() / rate * float64(time.Hour)))
	who := fmt.Sprintf("p-%06d", s.n)
	s.n++
	arm, lift := "current", 1.0
	if s.rng.IntN(2) == 1 {
		arm, lift = "wide", 1+s.cfg.Effect
	}
	platform := "web"
	if s.rng.Float64() < 0.4 {
		platform = "app"
	}
	keen := s.rng.NormFloat64()
	at := s.now
	if keen > 0.3 { // buys a ticket or two before the trial meets them
		for range 1 + s.rng.IntN(2) {
			s.plan(at.Add(time.Duration(s.rng.Float64()*float64(12*time.Hour))), "ticket", who, "amount", s.fare(keen))
		}
		at = at.Add(time.Duration((12 + 24*s.rng.Float64()) * float64(time.Hour)))
	}
	s.planAssign(at, who, arm, platform)
	for range 1 + s.rng.IntN(4) {
		at = at.Add(time.Duration(s.rng.ExpFloat64() * float64(40*time.Minute)))
		s.plan(at, "visit", who, "", 0)
		if s.rng.Float64() > 0.28*lift*math.Exp(0.4*keen)/1.08 {
			continue
		}
		ms := 180 * math.Exp(0.6*s.rng.NormFloat64())
		if !s.cfg.SlowFrom.IsZero() && at.After(s.cfg.SlowFrom) {
			ms *= 1.5
		}
		s.plan(at.Add(20*time.Second), "pay", who, "ms", math.Round(ms))
		s.plan(at.Add(21*time.Second), "ticket", who, "amount", s.fare(keen))
	}
}

func (s *Site) fare(keen float64) float64 {
	return math.Round(100*38*math.Exp(s.cfg.HeavyTail*s.rng.NormFloat64()+0.3*keen)) / 100
}

func (s *Site) planAssign(at time.Time, who, arm, platform string) {
	s.put(at, fmt.Appendf(nil, `,"type":"assign","trial":"seat-map","passenger":"%s","arm":"%s","platform":"%s"}`, who, arm, platform))
}

func (s *Site) plan(at time.Time, kind, who, field string, v float64) {
	b := fmt.Appendf(nil, `,"type":"%s","passenger":"%s"`, kind, who)
	if field != "" {
		b = append(b, `,"`+field+`":`...)
		b = strconv.AppendFloat(b, v, 'f', -1, 64)
	}
	s.put(at, append(b, '}'))
}

// put gives an event its id and the time at which it reaches the stream.
func (s *Site) put(at time.Time, rest []byte) {
	at = at.Truncate(time.Millisecond)
	s.id++
	line := fmt.Appendf(nil, `{"id":"e%08d","ts":"%s"`, s.id, at.UTC().Format("2006-01-02T15:04:05.000Z"))
	line = append(line, rest...)
	seen := at
	if s.cfg.Disordered {
		seen = at.Add(time.Duration(s.rng.ExpFloat64() * float64(4*time.Second)))
		if most := at.Add(90 * time.Second); seen.After(most) {
			seen = most
		}
		if s.rng.IntN(200) == 0 {
			heap.Push(&s.future, event{at, seen.Add(time.Second), line})
		}
	}
	heap.Push(&s.future, event{at, seen, line})
}

type events []event

func (h events) Len() int { return len(h) }
func (h events) Less(i, j int) bool {
	if h[i].seen.Equal(h[j].seen) {
		return string(h[i].line) < string(h[j].line)
	}
	return h[i].seen.Before(h[j].seen)
}
func (h events) Swap(i, j int) { h[i], h[j] = h[j], h[i] }
func (h *events) Push(x any)   { *h = append(*h, x.(event)) }
func (h *events) Pop() any {
	old := *h
	e := old[len(old)-1]
	*h = old[:len(old)-1]
	return e
}
