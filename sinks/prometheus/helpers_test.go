package prometheus

import (
	"context"
	"flag"
	"net/http/httptest"
	"strings"
	"testing"
	"time"

	prom "github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/promhttp"
	"github.com/prometheus/client_golang/prometheus/testutil"
	"go.uber.org/goleak"

	"stillwell/online"
)

// Property tests draw from one seed, so that a run can be repeated; -rapid.seed=N draws from
// another.
func TestMain(m *testing.M) {
	flag.Parse()
	if seed := flag.Lookup("rapid.seed"); seed.Value.String() == "0" {
		if err := flag.Set("rapid.seed", "20260302"); err != nil {
			panic(err)
		}
	}
	goleak.VerifyTestMain(m)
}

func newSink(t testing.TB, cfg Config) *Sink {
	t.Helper()
	if cfg.Listen == "" {
		cfg.Listen = "127.0.0.1:0"
	}
	s, err := New(cfg)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// started is a sink that listens until the test ends.
func started(t testing.TB, cfg Config) *Sink {
	t.Helper()
	s := newSink(t, cfg)
	if err := s.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { closeSoon(t, s) })
	return s
}

func closeSoon(t testing.TB, s *Sink) {
	t.Helper()
	ctx, cancel := context.WithTimeout(context.Background(), 5*time.Second)
	defer cancel()
	if err := s.Close(ctx); err != nil {
		t.Error(err)
	}
}

// pedantic has our own metrics, without the runtime's, and finds fault with what a page
// would let pass.
func pedantic(s *Sink) *prom.Registry {
	reg := prom.NewPedanticRegistry()
	reg.MustRegister(s.latest, s.vitals)
	return reg
}

// wantPage compares all our metrics, with their help and type, as text.
func wantPage(t *testing.T, s *Sink, want string) {
	t.Helper()
	if err := testutil.GatherAndCompare(pedantic(s), strings.NewReader(want)); err != nil {
		t.Error(err)
	}
}

// lines are the samples on the page of one metric, without the stillwell_ before them.
func lines(t testing.TB, s *Sink, metric string) string {
	t.Helper()
	w := httptest.NewRecorder()
	promhttp.HandlerFor(pedantic(s), promhttp.HandlerOpts{DisableCompression: true}).
		ServeHTTP(w, httptest.NewRequest("GET", "/metrics", nil))
	if w.Code != 200 {
		t.Fatalf("the page: %d\n%s", w.Code, w.Body)
	}
	var out strings.Builder
	for line := range strings.Lines(w.Body.String()) {
		name := strings.TrimPrefix(line[:strings.IndexAny(line, "{ ")], "stillwell_")
		if name == metric {
			out.WriteString(strings.TrimPrefix(line, "stillwell_"))
		}
	}
	return out.String()
}

func wantLines(t *testing.T, s *Sink, metric, want string) {
	t.Helper()
	want = strings.TrimPrefix(want, "\n")
	if got := lines(t, s, metric); got != want {
		t.Errorf("%s:\n%swant:\n%s", metric, got, want)
	}
}

func p(x float64) *float64 { return &x }

// mean is a reading of an arm's mean, complete in all its parts.
func mean(arm string, x float64, seg ...online.Pair) online.Reading {
	return online.Reading{Study: "seat-map", Estimate: "capped_fare", Arm: arm, Segment: seg, Value: p(x), StdError: p(0.25),
		Units: online.Counts{{Name: arm, N: 1000}}, Interval: &[2]float64{x - 0.5, x + 0.5}, Anytime: &[2]float64{x - 1, x + 1},
		Provision: &online.Provisional{Value: p(x + 0.125)}, Sampling: 1, Heaviest: p(0.03125)}
}

// effect is a contrast of an arm with the baseline, over units of both.
func effect(arm string, seg ...online.Pair) online.Reading {
	return online.Reading{Study: "seat-map", Estimate: "share_buying", Contrast: "difference", Arm: arm, Baseline: "current", Segment: seg,
		Value: p(0.015625), Units: online.Counts{{Name: "current", N: 20110}, {Name: arm, N: 20311}}, Sampling: 1}
}

func watch(state string, arm string, seg ...online.Pair) online.WatchReading {
	return online.WatchReading{Study: "seat-map", Watch: "buying-not-worse", Estimate: "share_buying", Arm: arm, Segment: seg, State: state}
}

func platform(v string) online.Pair { return online.Pair{Field: "platform", Value: v} }

func emit(s *Sink, readings ...online.Reading) { s.Emit(online.Output{Latest: readings}) }

func emitWatches(s *Sink, w ...online.WatchReading) { s.Emit(online.Output{Watches: w}) }
