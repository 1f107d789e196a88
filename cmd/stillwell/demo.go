package main

import (
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"
	"time"

	"github.com/spf13/cobra"
	"golang.org/x/term"

	"stillwell/cmd/stillwell/internal/ferry"
	"stillwell/cmd/stillwell/internal/station"
	"stillwell/config"
	"stillwell/online"
)

func demoCommand() *cobra.Command {
	d := demo{}
	cmd := &cobra.Command{
		Use:   "demo",
		Short: "the whole daemon on an embedded stream, sped up",
		Long: `Demo runs the daemon on an invented ferry company's ticket site: a trial of a new seat map with a
modest true effect, a few passengers who carry much of the variance, and a payment service. Nothing need
be installed. It ends by Ctrl-C, or by itself after --for.`,
		Example: `  stillwell demo
  stillwell demo --speed 36000 --for 48h --seed 7`,
		Args: func(cmd *cobra.Command, args []string) error {
			if len(args) > 0 {
				return wrong{fmt.Errorf("demo takes no file, got %q; see stillwell demo --help", args[0])}
			}
			return nil
		},
		RunE: func(cmd *cobra.Command, args []string) error { return d.run(cmd) },
	}
	cmd.Flags().Float64Var(&d.speed, "speed", 14400, "how many times as fast as the clock on the wall")
	d.length = 7 * 24 * time.Hour
	cmd.Flags().Var((*duration)(&d.length), "for", "time of the stream after which it ends; 0s: never")
	cmd.Flags().Uint64Var(&d.seed, "seed", 1, "another seed, other passengers")
	cmd.Flags().StringVar(&d.listen, "listen", "127.0.0.1:9464", "where metrics are served; empty: nowhere")
	return cmd
}

type demo struct {
	speed  float64
	length time.Duration
	seed   uint64
	listen string
	table  *table
}

// fastest is a year in three seconds.
const fastest = 1e7

// duration is a flag that takes days too, as durations in a study file do.
type duration time.Duration

func (d *duration) String() string { return config.FormatDuration(time.Duration(*d)) }
func (d *duration) Type() string   { return "duration" }
func (d *duration) Set(text string) error {
	v, err := config.ParseDuration(text)
	if err == nil && v < 0 {
		err = errors.New("it lies in the past")
	}
	if err != nil {
		return fmt.Errorf("%w; want for example 90m, 48h or 7d", err)
	}
	*d = duration(v)
	return nil
}

// demoFrom is where the demo's time begins.
var demoFrom = time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC)

func (d *demo) run(cmd *cobra.Command) (err error) {
	if !(d.speed > 0 && d.speed <= fastest) {
		return wrong{fmt.Errorf("--speed %g: want a number above 0, and at most %g", d.speed, float64(fastest))}
	}
	dir, err := os.MkdirTemp("", "stillwell-demo-")
	if err != nil {
		return err
	}
	f, err := config.Parse(filepath.Join(dir, "study.yaml"), ferry.Study)
	if err != nil {
		return err
	}
	f.State.Dir = filepath.Join(dir, "state")
	f.Sinks.File = &config.FileSink{Path: filepath.Join(dir, "readings.jsonl")}
	if d.listen != "" {
		f.Sinks.Prometheus = &config.Prometheus{Listen: d.listen}
	}
	if err := os.WriteFile(filepath.Join(dir, "study.yaml"), ferry.Study, 0o644); err != nil {
		return err
	}
	d.table = newTable(os.Stdout, term.IsTerminal(int(os.Stdout.Fd())))
	fmt.Printf("A ferry company's ticket site, %s of it a second. Folder: %s\n", time.Duration(d.speed)*time.Second, dir)
	if d.listen != "" {
		fmt.Printf("Metrics: http://%s/metrics\n", d.listen)
	}
	err = station.Run(cmd.Context(), f, station.RunOptions{
		Log: quiet(),
		Source: &ferry.Source{Speed: d.speed, For: d.length,
			Config: ferry.Config{Seed: d.seed, From: demoFrom, PerHour: 400, Effect: 0.09, Disordered: true}},
		Watch: d.table.show,
	})
	if err != nil {
		return err
	}
	d.table.end()
	fmt.Printf(`
What to try next:
  stillwell check %[1]s/study.yaml        what each number is, and what may be claimed of it
  stillwell show %[1]s/state              what was kept for a restart
  head -3 %[1]s/readings.jsonl            the readings, one JSON object a line
`, dir)
	return nil
}

// table shows the latest readings: redrawn in place on a terminal, once a simulated
// day elsewhere.
type table struct {
	out    io.Writer
	live   bool
	lines  int // of the last drawing
	drawn  time.Time
	day    int64
	latest map[string]online.Reading
	order  []string
	newest int64
}

func newTable(out io.Writer, live bool) *table {
	return &table{out: out, live: live, latest: map[string]online.Reading{}}
}

func (t *table) show(o online.Output) {
	for _, r := range o.Latest {
		if len(r.Segment) > 0 {
			continue
		}
		key := r.Study + "/" + r.Estimate + "/" + r.Arm
		if _, ok := t.latest[key]; !ok {
			t.order = append(t.order, key)
		}
		t.latest[key] = r
	}
	t.newest = o.Time
	for _, a := range o.Alarms {
		t.erase()
		fmt.Fprintf(t.out, "ALARM %s  %s: %s\n", shortTime(o.Time), a.Watch, a.Words)
	}
	day := o.Time / int64(24*time.Hour)
	switch {
	case t.live && (time.Since(t.drawn) > 200*time.Millisecond || len(o.Alarms) > 0):
		t.draw()
	case !t.live && day != t.day:
		t.draw()
	}
	t.day = day
}

func (t *table) erase() {
	if t.live && t.lines > 0 {
		fmt.Fprintf(t.out, "\x1b[%dA\x1b[J", t.lines)
	}
	t.lines = 0
}

func (t *table) draw() {
	t.erase()
	var b strings.Builder
	fmt.Fprintf(&b, "\n%s\n", shortTime(t.newest))
	fmt.Fprintf(&b, "%-20s %10s %10s %12s  %-22s %s\n", "estimate", "value", "std error", "complete", "at every look", "")
	for _, key := range t.order {
		r := t.latest[key]
		units := int64(0)
		for _, n := range r.Units {
			units += n.N
		}
		any, note := "-", ""
		if r.Anytime != nil {
			any = fmt.Sprintf("%.4g to %.4g", r.Anytime[0], r.Anytime[1])
		} else {
			note = r.Why["anytime"]
		}
		fmt.Fprintf(&b, "%-20s %10s %10s %12d  %-22s %s\n", r.Estimate, number(r.Value), number(r.StdError), units, any, clip(note, 60))
	}
	t.lines = strings.Count(b.String(), "\n")
	io.WriteString(t.out, b.String())
	t.drawn = time.Now()
}

func (t *table) end() {
	t.draw()
	t.lines = 0
}

func number(x *float64) string {
	if x == nil {
		return "-"
	}
	return fmt.Sprintf("%.4g", *x)
}

func clip(s string, n int) string {
	if len(s) <= n {
		return s
	}
	return s[:n-1] + "…"
}

func shortTime(at int64) string { return time.Unix(0, at).UTC().Format("2006-01-02 15:04") }
