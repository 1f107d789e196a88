package main

import (
	"fmt"
	"io"
	"os"
	"sync"
	"time"

	"golang.org/x/term"

	"stillwell/config"
)

// redraw is how often progress is shown, and window how many of the last drawings the rate is over.
const (
	redraw = 200 * time.Millisecond
	window = 25
)

// showProgress draws one line of progress on a terminal until stop is called, which erases it
// and waits; elsewhere it does nothing.
func showProgress(to *os.File, progress func() (done, total int64)) (stop func()) {
	if !term.IsTerminal(int(to.Fd())) {
		return func() {}
	}
	quit := make(chan struct{})
	var drawing sync.WaitGroup
	drawing.Go(func() {
		var m meter
		tick := time.NewTicker(redraw)
		defer tick.Stop()
		for {
			select {
			case now := <-tick.C:
				done, total := progress()
				width, _, err := term.GetSize(int(to.Fd()))
				if err != nil || width < 1 {
					width = 80
				}
				line := m.line(now, done, total)
				fmt.Fprintf(to, "\r%s\x1b[K", line[:min(len(line), width-1)]) // at the edge the cursor would wrap
			case <-quit:
				io.WriteString(to, "\r\x1b[K")
				return
			}
		}
	})
	return sync.OnceFunc(func() {
		close(quit)
		drawing.Wait()
	})
}

// meter tells how fast bytes go by.
type meter struct {
	at   []time.Time
	done []int64
}

// line is what is shown after done of total bytes; total is negative while it is not known.
func (m *meter) line(now time.Time, done, total int64) string {
	m.at, m.done = append(m.at, now), append(m.done, done)
	if n := len(m.at); n > window {
		m.at, m.done = m.at[n-window:], m.done[n-window:]
	}
	rate := float64(done-m.done[0]) / max(now.Sub(m.at[0]).Seconds(), 1e-9)
	speed := ""
	if len(m.at) > 1 {
		speed = fmt.Sprintf("  %s/s", amount(rate))
	}
	if total < 0 {
		return fmt.Sprintf("read %s%s", amount(float64(done)), speed)
	}
	left := ""
	if seconds := float64(total-done) / rate; rate > 0 && seconds < 1e7 {
		left = fmt.Sprintf("  %s left", config.FormatDuration(time.Duration(seconds+0.5)*time.Second))
	}
	return fmt.Sprintf("%3.0f%% of %s%s%s", 100*float64(done)/float64(max(total, done, 1)), amount(float64(total)), speed, left)
}

// amount is a number of bytes, for people.
func amount(n float64) string {
	for _, unit := range []string{"B", "KiB", "MiB"} {
		if n < 1024 {
			return fmt.Sprintf("%.*f %s", map[bool]int{true: 0, false: 1}[unit == "B"], n, unit)
		}
		n /= 1024
	}
	return fmt.Sprintf("%.1f GiB", n)
}
