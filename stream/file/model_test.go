package file

import (
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"pgregory.net/rapid"

	"stillwell/stream"
)

// A logModel is a log as its writer and whoever rotates it leave it on the disk, and
// what a reader must make of it.
type logModel struct {
	t          *rapid.T
	path       string
	csv        bool
	keepTimes  bool         // compressing keeps the time of modification
	generation []*modelFile // the last one is under the path
	count      int
}

type modelFile struct {
	path    string
	content string
	packed  bool
}

const modelHeader = "passenger,fare"

func (m *logModel) present() *modelFile { return m.generation[len(m.generation)-1] }

// write appends whole lines and perhaps the start of one, in several writes.
func (m *logModel) write() {
	p := m.present()
	var b strings.Builder
	if m.csv && p.content == "" {
		fmt.Fprintln(&b, modelHeader)
	}
	for range rapid.IntRange(1, 12).Draw(m.t, "lines") {
		m.count++
		fmt.Fprintf(&b, "p-%05d,%s\n", m.count, strings.Repeat("4", rapid.IntRange(0, 150).Draw(m.t, "width")))
	}
	if rapid.Bool().Draw(m.t, "partial") {
		m.count++
		fmt.Fprintf(&b, "p-%05d", m.count)
	}
	text := b.String()
	p.content += text
	for text != "" {
		n := rapid.IntRange(1, len(text)).Draw(m.t, "bytes of a write")
		appendTo(m.t, p.path, text[:n])
		text = text[n:]
	}
}

// moveUp renames every rotated file to the next number.
func (m *logModel) moveUp() {
	for i, g := range m.generation[:len(m.generation)-1] {
		to := fmt.Sprintf("%s.%d", m.path, len(m.generation)-i)
		if g.packed {
			to += filepath.Ext(g.path)
		}
		rename(m.t, g.path, to)
		g.path = to
	}
}

func (m *logModel) rotate() {
	m.moveUp()
	p := m.present()
	p.path = m.path + ".1"
	rename(m.t, m.path, p.path)
	m.generation = append(m.generation, &modelFile{path: m.path})
	if rapid.Bool().Draw(m.t, "make the new file") {
		write(m.t, m.path, "")
	}
}

func (m *logModel) copyAndCut() {
	m.moveUp()
	p := m.present()
	p.path = m.path + ".1"
	write(m.t, p.path, p.content)
	write(m.t, m.path, "")
	m.generation = append(m.generation, &modelFile{path: m.path})
}

// compress packs the oldest file that is not.
func (m *logModel) compress() {
	for _, g := range m.generation[:len(m.generation)-1] {
		if !g.packed && g.content != "" {
			f, ext := gzipForm, ".gz"
			if rapid.Bool().Draw(m.t, "zstd") {
				f, ext = zstdForm, ".zst"
			}
			compress(m.t, f, g.path, g.path+ext)
			g.path, g.packed = g.path+ext, true
			if !m.keepTimes {
				if err := os.Chtimes(g.path, time.Time{}, m.now()); err != nil {
					m.t.Fatalf("%v", err)
				}
			}
			return
		}
	}
}

// now asks the disk for the time: the bubble has a clock of its own.
func (m *logModel) now() time.Time {
	probe := filepath.Join(filepath.Dir(m.path), "probe")
	write(m.t, probe, "now")
	info, err := os.Stat(probe)
	if err != nil {
		m.t.Fatalf("%v", err)
	}
	return info.ModTime()
}

type modelLine struct {
	text       string
	generation int
	offset     int64
}

// lines are those that must have come by now.
func (m *logModel) lines() (lines []modelLine) {
	last := 0
	for i, g := range m.generation {
		if g.content != "" {
			last = i
		}
	}
	for i, g := range m.generation {
		at := int64(0)
		rest := g.content
		if m.csv && rest != "" {
			at = int64(len(modelHeader) + 1)
			rest = rest[at:]
		}
		for rest != "" {
			line, after, whole := strings.Cut(rest, "\n")
			if !whole && i == last {
				break
			}
			lines = append(lines, modelLine{line, i, at})
			at += int64(len(rest) - len(after))
			rest = after
		}
	}
	return lines
}

// However a log is written, rotated, compressed, cut after copying, and however the
// reader is stopped and started again at a position it once had: every line from
// there on comes once, in order.
func TestLogModel(t *testing.T) {
	folders := t.TempDir()
	run := 0
	synctest.Test(t, func(t *testing.T) {
		rapid.Check(struct{ rapid.TB }{t}, func(t *rapid.T) {
			run++
			dir := filepath.Join(folders, fmt.Sprint(run))
			if err := os.Mkdir(dir, 0o755); err != nil {
				t.Fatalf("%v", err)
			}
			defer os.RemoveAll(dir)
			m := &logModel{
				t:         t,
				path:      filepath.Join(dir, "harbour.csv"),
				csv:       rapid.Bool().Draw(t, "csv"),
				keepTimes: rapid.Bool().Draw(t, "keep times"),
			}
			m.generation = []*modelFile{{path: m.path}}
			cfg := Config{Paths: []string{m.path}, CSV: m.csv, ChunkSize: rapid.IntRange(1, 4000).Draw(t, "chunk")}
			write(t, m.path, "")
			f := startFollower(t, cfg, nil)
			synctest.Wait() // it knows the file from its first byte on
			defer func() { f.cancel() }()
			first := 0 // line that this follower began with
			running := true
			check := func() {
				f.settle()
				want, got := m.lines()[first:], f.book.lines[m.path]
				for i := range max(len(want), len(got)) {
					if i >= len(got) || i >= len(want) || got[i].Text != want[i].text || got[i].Offset != want[i].offset || m.csv && got[i].Header != modelHeader {
						t.Fatalf("%d lines, want %d; they differ at %d: %+v, want %+v", len(got), len(want), i, got[i:min(len(got), i+1)], want[i:min(len(want), i+1)])
					}
				}
				if f.book.gaps != nil {
					t.Fatalf("gaps %q", f.book.gaps)
				}
			}
			for range rapid.IntRange(1, 15).Draw(t, "acts") {
				switch act := rapid.SampledFrom([]string{"write", "write", "write", "rotate", "copy and cut", "compress", "settle", "stop", "start", "start"}).Draw(t, "act"); act {
				case "write":
					m.write()
				case "rotate":
					if _, err := os.Stat(m.path); err == nil {
						m.rotate()
					}
				case "copy and cut":
					if running {
						check() // else what is written now is lost with the old file's end
					}
					if m.present().content != "" {
						m.copyAndCut()
					}
				case "compress":
					m.compress()
				case "settle":
					if running {
						check()
					}
				case "stop":
					if running {
						check()
						f.stop()
						running = false
					}
				case "start":
					if running {
						break
					}
					var from *stream.Position
					if came := f.book.lines[m.path]; len(came) > 0 {
						i := rapid.IntRange(0, len(came)-1).Draw(t, "from line")
						from = &stream.Position{Offset: came[i].Offset, Mark: came[i].Mark}
						first += i
					} else if len(m.generation) > 1 {
						break // it would begin with the present file
					}
					f = startFollower(t, cfg, from)
					synctest.Wait() // without a position it must know the file from its first byte on
					running = true
				}
			}
			if running {
				check()
				f.stop()
			}
			synctest.Wait()
		})
	})
}
