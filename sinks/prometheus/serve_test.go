package prometheus

import (
	"context"
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	prom "github.com/prometheus/client_golang/prometheus"
	"go.uber.org/zap"
	"go.uber.org/zap/zaptest/observer"

	"stillwell/online"
)

// client keeps no connection, so that none outlives its test.
var client = &http.Client{Transport: &http.Transport{DisableKeepAlives: true}, Timeout: 10 * time.Second}

func do(t testing.TB, s *Sink, method, path string) (status int, body string, header http.Header) {
	t.Helper()
	req, err := http.NewRequest(method, "http://"+s.Addr()+path, nil)
	if err != nil {
		t.Fatal(err)
	}
	res, err := client.Do(req)
	if err != nil {
		t.Fatal(err)
	}
	defer func() { _ = res.Body.Close() }()
	b, err := io.ReadAll(res.Body)
	if err != nil {
		t.Fatal(err)
	}
	return res.StatusCode, string(b), res.Header
}

func wantAnswer(t *testing.T, s *Sink, path string, status int, body string) {
	t.Helper()
	got, text, header := do(t, s, "GET", path)
	if got != status || text != body {
		t.Errorf("%s: %d %q, want %d %q", path, got, text, status, body)
	}
	if kind := header.Get("Content-Type"); kind != "text/plain; charset=utf-8" {
		t.Errorf("%s: Content-Type %q", path, kind)
	}
}

func TestHealthPages(t *testing.T) {
	s := started(t, Config{})
	wantAnswer(t, s, "/healthz", 200, "alive\n")
	wantAnswer(t, s, "/readyz", 503, "starting: the station is not up yet\n")

	var live, ready error
	s.SetHealth(Health{Live: func() error { return live }, Ready: func() error { return ready }})
	wantAnswer(t, s, "/healthz", 200, "alive\n")
	wantAnswer(t, s, "/readyz", 200, "ready\n")

	ready = errors.New("catching up: 3h12m behind on harbour.events/0")
	wantAnswer(t, s, "/healthz", 200, "alive\n")
	wantAnswer(t, s, "/readyz", 503, "catching up: 3h12m behind on harbour.events/0\n")

	live, ready = errors.New("no step for 10m although events come"), nil
	wantAnswer(t, s, "/healthz", 503, "no step for 10m although events come\n")
	wantAnswer(t, s, "/readyz", 200, "ready\n")

	s.SetHealth(Health{})
	wantAnswer(t, s, "/healthz", 200, "alive\n")
	wantAnswer(t, s, "/readyz", 200, "ready\n")
}

func TestPages(t *testing.T) {
	s := started(t, Config{})
	emit(s, mean("wide", 8))
	wantAnswer(t, s, "/", 200, index)
	status, body, header := do(t, s, "GET", "/metrics")
	if status != 200 || !strings.HasPrefix(header.Get("Content-Type"), "text/plain; version=0.0.4") {
		t.Errorf("/metrics: %d, %s", status, header.Get("Content-Type"))
	}
	for _, want := range []string{
		`stillwell_estimate{arm="wide",contrast="",estimate="capped_fare",segment="",study="seat-map"} 8` + "\n",
		"\ngo_goroutines ", "\nprocess_start_time_seconds ",
	} {
		if !strings.Contains(body, want) {
			t.Errorf("/metrics lacks %q", want)
		}
	}
	for _, tt := range []struct {
		method, path string
		status       int
	}{
		{"GET", "/metric", 404}, {"GET", "/metrics/x", 404}, {"HEAD", "/metrics", 200}, {"HEAD", "/readyz", 503},
		{"POST", "/metrics", 405}, {"DELETE", "/healthz", 405}, {"POST", "/", 405},
	} {
		if status, _, _ := do(t, s, tt.method, tt.path); status != tt.status {
			t.Errorf("%s %s: %d, want %d", tt.method, tt.path, status, tt.status)
		}
	}
}

func TestStationRegistersItsOwn(t *testing.T) {
	s := started(t, Config{})
	mine := prom.NewGauge(prom.GaugeOpts{Name: "stillwell_ferries", Help: "Ferries at sea."})
	s.Registry().MustRegister(mine)
	mine.Set(3)
	if _, body, _ := do(t, s, "GET", "/metrics"); !strings.Contains(body, "\nstillwell_ferries 3\n") {
		t.Error("the page lacks what was registered")
	}
}

// A collector that contradicts itself is logged, and takes nothing else from the page.
func TestFaultyCollectorHidesNothingElse(t *testing.T) {
	core, logs := observer.New(zap.WarnLevel)
	s := started(t, Config{Log: zap.New(core)})
	emit(s, mean("wide", 8))
	s.Registry().MustRegister(twice{prom.NewDesc("stillwell_twice", "The same series two times.", nil, nil)})
	status, body, _ := do(t, s, "GET", "/metrics")
	if status != 200 || !strings.Contains(body, "stillwell_estimate{") {
		t.Errorf("/metrics: %d without the readings", status)
	}
	if logs.FilterMessageSnippet("stillwell_twice").Len() == 0 {
		t.Errorf("nothing was logged of the fault: %v", logs.All())
	}
}

type twice struct{ desc *prom.Desc }

func (c twice) Describe(ch chan<- *prom.Desc) { ch <- c.desc }

func (c twice) Collect(ch chan<- prom.Metric) {
	for range 2 {
		ch <- prom.MustNewConstMetric(c.desc, prom.GaugeValue, 1)
	}
}

func TestAddressInUse(t *testing.T) {
	first := started(t, Config{})
	second := newSink(t, Config{Listen: first.Addr()})
	err := second.Start()
	if !errors.Is(err, syscall.EADDRINUSE) {
		t.Fatalf("Start on a taken address: %v", err)
	}
	for _, want := range []string{"prometheus sink: listen on " + first.Addr() + ":", "another program, or another instance of this one, has it"} {
		if !strings.Contains(err.Error(), want) {
			t.Errorf("%q lacks %q", err, want)
		}
	}
	closeSoon(t, second) // never started
}

func TestAddressThatCannotBe(t *testing.T) {
	for _, tt := range []struct{ listen, want string }{
		{"9464", "missing port in address; want host:port, such as 127.0.0.1:9464"},
		{"::1:9464", "too many colons"},
	} {
		if _, err := New(Config{Listen: tt.listen}); err == nil || !strings.Contains(err.Error(), tt.want) || !strings.Contains(err.Error(), tt.listen) {
			t.Errorf("New on %q: %v, want %q", tt.listen, err, tt.want)
		}
	}
	s := newSink(t, Config{Listen: "192.0.2.7:0"}) // RFC 5737: of no machine
	if err := s.Start(); err == nil || !strings.Contains(err.Error(), "this machine has no such address") {
		t.Errorf("Start on another machine's address: %v", err)
	}
	if _, err := New(Config{MaxSeries: -1}); err == nil || !strings.Contains(err.Error(), "at most -1 series") {
		t.Errorf("New with -1 series: %v", err)
	}
}

func TestDefaults(t *testing.T) {
	s, err := New(Config{})
	if err != nil {
		t.Fatal(err)
	}
	if s.Addr() != "127.0.0.1:9464" || s.latest.readings.max != 10_000 || s.latest.watches.max != 10_000 {
		t.Errorf("listens on %s with at most %d and %d", s.Addr(), s.latest.readings.max, s.latest.watches.max)
	}
}

func TestStartAndCloseAgain(t *testing.T) {
	s := newSink(t, Config{})
	closeSoon(t, s)
	for range 2 {
		if err := s.Start(); err != nil {
			t.Fatal(err)
		}
		addr := s.Addr()
		if err := s.Start(); err == nil || !strings.Contains(err.Error(), addr) {
			t.Errorf("Start of a started one: %v", err)
		}
		wantAnswer(t, s, "/healthz", 200, "alive\n")
		closeSoon(t, s)
		closeSoon(t, s)
		ln, err := net.Listen("tcp", addr)
		if err != nil {
			t.Fatalf("the address is not free after Close: %v", err)
		}
		_ = ln.Close()
	}
}

// slow is a snapshot that does not come before it is let go.
type slow struct{ asked, release chan struct{} }

func newSlow(s *Sink) slow {
	w := slow{make(chan struct{}), make(chan struct{})}
	s.Observe(func() Snapshot {
		w.asked <- struct{}{}
		<-w.release
		return Snapshot{}
	})
	return w
}

func scrape(s *Sink) error {
	res, err := client.Get("http://" + s.Addr() + "/metrics")
	if err != nil {
		return err
	}
	defer func() { _ = res.Body.Close() }()
	if res.StatusCode != http.StatusOK {
		return errors.New(res.Status)
	}
	_, err = io.Copy(io.Discard, res.Body)
	return err
}

func TestSlowSnapshotHoldsUpNeitherStreamNorHealth(t *testing.T) {
	s := started(t, Config{})
	w := newSlow(s)
	scraped := make(chan error, 1)
	go func() { scraped <- scrape(s) }()
	<-w.asked
	emitted := make(chan struct{})
	go func() {
		emit(s, mean("wide", 8))
		close(emitted)
	}()
	select {
	case <-emitted:
	case <-time.After(5 * time.Second):
		t.Fatal("Emit waits for a snapshot")
	}
	wantAnswer(t, s, "/healthz", 200, "alive\n")
	close(w.release)
	if err := <-scraped; err != nil {
		t.Error(err)
	}
}

// Scrapes that pile up are told to come again.
func TestScrapesAreBounded(t *testing.T) {
	s := started(t, Config{})
	w := newSlow(s)
	var under sync.WaitGroup
	for range maxScrapes {
		under.Go(func() {
			if err := scrape(s); err != nil {
				t.Error(err)
			}
		})
	}
	for range maxScrapes {
		<-w.asked
	}
	if status, _, _ := do(t, s, "GET", "/metrics"); status != 503 {
		t.Errorf("one scrape more: %d, want 503", status)
	}
	close(w.release)
	under.Wait()
}

func TestCloseLetsAScrapeFinish(t *testing.T) {
	s := newSink(t, Config{})
	if err := s.Start(); err != nil {
		t.Fatal(err)
	}
	w := newSlow(s)
	scraped, closed := make(chan error, 1), make(chan error, 1)
	go func() { scraped <- scrape(s) }()
	<-w.asked
	go func() { closed <- s.Close(context.Background()) }()
	select {
	case err := <-closed:
		t.Fatalf("closed in the midst of a scrape: %v", err)
	case <-time.After(50 * time.Millisecond):
	}
	close(w.release)
	if err := errors.Join(<-scraped, <-closed); err != nil {
		t.Error(err)
	}
}

func TestCloseCutsAScrapeOffAtItsDeadline(t *testing.T) {
	s := newSink(t, Config{})
	if err := s.Start(); err != nil {
		t.Fatal(err)
	}
	w := newSlow(s)
	scraped := make(chan error, 1)
	go func() { scraped <- scrape(s) }()
	<-w.asked
	ctx, cancel := context.WithTimeout(context.Background(), 20*time.Millisecond)
	defer cancel()
	if err := s.Close(ctx); !errors.Is(err, context.DeadlineExceeded) {
		t.Errorf("Close with a scrape under way: %v, want the deadline's error", err)
	}
	select {
	case err := <-scraped:
		if err == nil {
			t.Error("the scrape was answered after all")
		}
	case <-time.After(5 * time.Second):
		t.Error("the scrape's connection was not cut")
	}
	close(w.release)
}

// A scrape sees a step whole, whatever is emitted meanwhile.
func TestEmitWhileScraping(t *testing.T) {
	s := started(t, Config{})
	s.Observe(fullSnapshot)
	step := func(n int) (o online.Output) {
		for i := range 20 {
			r := mean(fmt.Sprintf("arm-%d", i), float64(n), platform("web"))
			r.StdError, r.Heaviest = p(float64(n)), p(float64(n))
			r.Units[0].N = int64(n)
			o.Latest = append(o.Latest, r)
		}
		return o
	}
	s.Emit(step(0))
	stop := make(chan struct{})
	var work sync.WaitGroup
	defer func() {
		close(stop)
		work.Wait()
	}()
	work.Go(func() {
		for n := 1; ; n++ {
			select {
			case <-stop:
				return
			default:
				s.Emit(step(n))
				emitWatches(s, watch(online.StateWatching, "wide", platform(fmt.Sprint(n%50))))
			}
		}
	})
	work.Go(func() {
		for range 10 {
			if err := scrape(s); err != nil {
				t.Error(err)
			}
		}
	})
	for range 50 {
		families, err := pedantic(s).Gather()
		if err != nil {
			t.Fatal(err)
		}
		seen := map[float64]bool{}
		for _, f := range families {
			switch f.GetName() {
			case "stillwell_estimate", "stillwell_std_error", "stillwell_units", "stillwell_heaviest_share":
				for _, m := range f.GetMetric() {
					seen[m.GetGauge().GetValue()] = true
				}
			}
		}
		if len(seen) != 1 {
			t.Fatalf("one scrape shows several steps: %v", seen)
		}
	}
}
