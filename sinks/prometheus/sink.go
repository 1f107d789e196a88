// Package prometheus shows the latest readings, the state of watches and the daemon's own
// health on one HTTP listener: a page of metrics to be scraped, and two pages that say whether
// the daemon is alive and ready.
//
// Readings are gauges with the labels study, estimate, contrast, arm and segment. A number
// that a reading lacks has no series, and loses the one it had. What came from events (arms,
// segments) is only ever the value of a label.
//
//	contrast  "difference" or "relative"; empty for an estimate that is not compared
//	arm       the arm that the number speaks of; empty in a study without arms. A contrast has it for
//	          the arm that is compared with the baseline. The one exception is the baseline's count of
//	          units, see below
//	segment   platform=web, or platform=web,country=NO; empty for everyone. A comma or backslash in a
//	          value is preceded by a backslash, and so is an equals sign in a field's name, so that two
//	          segments never read alike
//
// In stillwell_units the label arm is always the arm whose units are counted. A contrast
// therefore has a series for each of its two arms, the baseline's too: the count beside
// stillwell_estimate{arm="wide"} is stillwell_units{arm="wide"}, and a sum over arms counts nobody
// twice, even where several arms are compared with one baseline.
package prometheus

import (
	"errors"
	"fmt"
	"net"
	"net/http"
	"sync"
	"sync/atomic"
	"time"

	prom "github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/collectors"
	"go.uber.org/zap"

	"stillwell/online"
)

const (
	defaultListen    = "127.0.0.1:9464"
	defaultMaxSeries = 10_000
)

// Config says where the page is and how much it may hold.
type Config struct {
	Listen string // host:port; default 127.0.0.1:9464. Port 0 takes any free one, see Addr

	// MaxSeries bounds the series of each metric of readings, and of each metric of watches;
	// default 10,000. Where there are more, segments that came later have none, and are counted in
	// stillwell_series_dropped. What is about everyone, and any alarm that is raised, always has its
	// series.
	MaxSeries int

	Log *zap.Logger // nil: nothing is logged
}

// A Sink holds the latest of what it was told, until it is scraped. Its methods may be called
// at the same time, but for Start and Close.
type Sink struct {
	listen string
	log    *zap.Logger
	reg    *prom.Registry
	latest *latest
	vitals *vitals
	health atomic.Pointer[Health]

	mu     sync.Mutex // guards what follows
	server *http.Server
	addr   string
	ended  chan error // has what Serve returned
}

// New returns a sink that does not listen yet. It fails where the address or the bound
// cannot be meant.
func New(cfg Config) (*Sink, error) {
	if cfg.Listen == "" {
		cfg.Listen = defaultListen
	}
	if _, _, err := net.SplitHostPort(cfg.Listen); err != nil {
		return nil, fmt.Errorf("prometheus sink: listen %q: %w; want host:port, such as %s", cfg.Listen, err, defaultListen)
	}
	if cfg.MaxSeries < 0 {
		return nil, fmt.Errorf("prometheus sink: at most %d series, want 1 or more, or 0 for %d", cfg.MaxSeries, defaultMaxSeries)
	}
	if cfg.MaxSeries == 0 {
		cfg.MaxSeries = defaultMaxSeries
	}
	if cfg.Log == nil {
		cfg.Log = zap.NewNop()
	}
	s := &Sink{
		listen: cfg.Listen,
		log:    cfg.Log,
		reg:    prom.NewRegistry(),
		latest: newLatest(cfg.MaxSeries),
		vitals: &vitals{now: time.Now},
	}
	var errs []error
	for _, c := range []prom.Collector{
		s.latest, s.vitals,
		collectors.NewGoCollector(), collectors.NewProcessCollector(collectors.ProcessCollectorOpts{}),
	} {
		errs = append(errs, s.reg.Register(c))
	}
	if err := errors.Join(errs...); err != nil {
		return nil, fmt.Errorf("prometheus sink: %w", err)
	}
	return s, nil
}

// Emit takes in a step: a scrape sees all of it or nothing. It does no I/O, and waits at most
// for a scrape to copy the numbers. o is not kept.
func (s *Sink) Emit(o online.Output) { s.latest.take(&o) }

// Registry is where further metrics are registered to be on the page. It belongs to this
// sink alone.
func (s *Sink) Registry() prom.Registerer { return s.reg }

// Observe makes f the source of the daemon's own metrics. It is called once a scrape, by
// several scrapes at a time if they come so, and may take its time: only the scrape waits for it.
func (s *Sink) Observe(f func() Snapshot) { s.vitals.observe(f) }
