package prometheus

import (
	"context"
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"
	"syscall"
	"time"

	"github.com/prometheus/client_golang/prometheus/promhttp"
	"go.uber.org/zap"
)

// Limits of the listener, so that no client keeps what others need.
const (
	readTimeout  = 10 * time.Second
	writeTimeout = time.Minute
	idleTimeout  = 2 * time.Minute
	maxHeader    = 16 << 10
	maxScrapes   = 8 // at a time; more are told to come again
)

// Health says how to ask whether the daemon is alive and ready; an error is the reason why
// not, as a person reads it. Both are called at every request, by several at a time, and must not
// wait for the stream. A nil function has no objection.
type Health struct {
	Live  func() error // an error asks for the process to be started anew
	Ready func() error // an error until readings can be relied on to be of the present
}

// SetHealth makes h what /healthz and /readyz ask. Until then the daemon is alive, and not ready.
func (s *Sink) SetHealth(h Health) { s.health.Store(&h) }

func (s *Sink) live() error {
	if h := s.health.Load(); h != nil && h.Live != nil {
		return h.Live()
	}
	return nil
}

var errStarting = errors.New("starting: the station is not up yet")

func (s *Sink) ready() error {
	h := s.health.Load()
	switch {
	case h == nil:
		return errStarting
	case h.Ready == nil:
		return nil
	}
	return h.Ready()
}

const index = `stillwell

/metrics   readings, watches and the daemon's health, for Prometheus
/healthz   200 while the daemon is alive
/readyz    200 once it is ready, before that 503 and the reason
`

func (s *Sink) handler() http.Handler {
	logged, _ := zap.NewStdLogAt(s.log, zap.WarnLevel) // a known level is never refused
	mux := http.NewServeMux()
	mux.Handle("GET /metrics", promhttp.HandlerFor(s.reg, promhttp.HandlerOpts{
		ErrorLog:            logged,
		ErrorHandling:       promhttp.ContinueOnError, // one faulty metric does not hide the others
		Registry:            s.reg,
		MaxRequestsInFlight: maxScrapes,
	}))
	mux.HandleFunc("GET /healthz", answer("alive", s.live))
	mux.HandleFunc("GET /readyz", answer("ready", s.ready))
	mux.HandleFunc("GET /{$}", func(w http.ResponseWriter, _ *http.Request) { plain(w, http.StatusOK, index) })
	return mux
}

func answer(fine string, ask func() error) http.HandlerFunc {
	return func(w http.ResponseWriter, _ *http.Request) {
		if err := ask(); err != nil {
			plain(w, http.StatusServiceUnavailable, err.Error()+"\n")
			return
		}
		plain(w, http.StatusOK, fine+"\n")
	}
}

func plain(w http.ResponseWriter, status int, text string) {
	h := w.Header()
	h.Set("Content-Type", "text/plain; charset=utf-8")
	h.Set("X-Content-Type-Options", "nosniff")
	h.Set("Cache-Control", "no-store")
	w.WriteHeader(status)
	_, _ = io.WriteString(w, text) // a client that has gone needs no answer
}

// Start takes the address and serves in a goroutine, until Close. It fails, naming the
// address, where that cannot be had.
func (s *Sink) Start() error {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.server != nil {
		return fmt.Errorf("prometheus sink: listens on %s already", s.addr)
	}
	ln, err := net.Listen("tcp", s.listen)
	if err != nil {
		return fmt.Errorf("prometheus sink: listen on %s: %w%s", s.listen, err, remedy(err))
	}
	logged, _ := zap.NewStdLogAt(s.log, zap.WarnLevel)
	s.server = &http.Server{
		Handler:           s.handler(),
		ReadHeaderTimeout: readTimeout,
		ReadTimeout:       readTimeout,
		WriteTimeout:      writeTimeout,
		IdleTimeout:       idleTimeout,
		MaxHeaderBytes:    maxHeader,
		ErrorLog:          logged,
	}
	s.addr = ln.Addr().String()
	s.ended = make(chan error, 1)
	go func(server *http.Server, ended chan<- error) {
		err := server.Serve(ln)
		if !errors.Is(err, http.ErrServerClosed) {
			s.log.Error("metrics are no longer served", zap.Error(err))
		}
		ended <- err
	}(s.server, s.ended)
	s.log.Info("metrics are served", zap.String("address", s.addr))
	return nil
}

func remedy(err error) string {
	switch {
	case errors.Is(err, syscall.EADDRINUSE):
		return "; another program, or another instance of this one, has it: stop that, or name another port"
	case errors.Is(err, syscall.EACCES):
		return "; ports below 1024 need a privilege: name a higher one"
	case errors.Is(err, syscall.EADDRNOTAVAIL):
		return "; this machine has no such address: name 127.0.0.1, or one that it has"
	}
	return ""
}

// Addr is the address that is listened on, as host:port; before Start the one asked for.
func (s *Sink) Addr() string {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.addr == "" {
		return s.listen
	}
	return s.addr
}

// Close ends the listener, lets requests under way finish until ctx ends, and waits for the
// goroutine of Start. Where ctx ends first, their connections are cut, and its error returned. A
// sink that does not listen is closed already.
func (s *Sink) Close(ctx context.Context) error {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.server == nil {
		return nil
	}
	err := s.server.Shutdown(ctx)
	if err != nil {
		err = errors.Join(err, s.server.Close())
	}
	if served := <-s.ended; !errors.Is(served, http.ErrServerClosed) {
		err = errors.Join(err, served)
	}
	s.server, s.addr = nil, ""
	if err != nil {
		return fmt.Errorf("prometheus sink: %w", err)
	}
	return nil
}
