// Package config reads a study file: it gives a checked plan, or all that is wrong
// with the file at once, each fault with its place, its reason and the ways out.
//
// What the file can show is decided here, and only that; what only the data can
// show is the plan's business when it runs. Explain says in words what each
// estimate of a file is and what may be claimed of it.
package config

import (
	"fmt"
	"os"
	"path/filepath"
	"time"

	"stillwell/online"
	"stillwell/online/expr"
)

// A File is a study file that has been found right.
type File struct {
	Path     string
	Plan     *online.Plan // studies, steps, level of intervals and limits
	Stream   Stream
	Sinks    Sinks
	State    State
	Warnings Faults // what is allowed and still worth a word

	StreamPrint Fingerprint   // what of the stream decides numbers
	StudyPrints []Fingerprint // the same for each of Plan.Studies
	written     []written     // expressions as the file has them, for each of Plan.Studies
	sourceFile  string        // stream.file.path as the file has it
}

// State says where and how often state is kept.
type State struct {
	Dir   string        // resolved against the study file's folder
	Every time.Duration // least time between two checkpoints
}

// Load reads a study file from disk. Its error is Faults where the file can be read but is wrong.
func Load(path string) (*File, error) {
	data, err := os.ReadFile(path)
	if err != nil {
		return nil, fmt.Errorf("study file: %w", err)
	}
	return Parse(path, data)
}

// Parse checks the text of a study file. The path is used in faults, and relative
// paths in the file start from its folder. Its error, if any, is Faults.
func Parse(path string, data []byte) (*File, error) {
	data = clean(data)
	s := newSource(path, data)
	root, faults := parseTree(s, data)
	if root == nil {
		return nil, faults
	}
	c := &checker{source: s, faults: faults}
	f := c.file(root)
	if len(c.faults) > 0 {
		return nil, c.faults.sorted()
	}
	f.Warnings = c.warnings.sorted()
	return f, nil
}

var topKeys = keys("stream", "studies", "readings", "sinks", "state", "limits").
	with("families (false discoveries over several watches)", "families")

// Defaults of what a file may leave away.
const (
	defaultEvery  = 10 * time.Second
	defaultLevel  = 0.95
	defaultState  = "state"
	defaultSave   = 30 * time.Second
	defaultUnits  = 20_000_000
	defaultRows   = 5_000_000
	defaultGroups = 200 // segments
)

func (c *checker) file(root *node) *File {
	f := &File{
		Path:  c.path,
		Plan:  &online.Plan{Fields: &expr.Fields{}, Every: defaultEvery, Level: defaultLevel, Limits: online.Limits{Units: defaultUnits, Rows: defaultRows, Segments: defaultGroups}},
		State: State{Dir: c.resolve(defaultState), Every: defaultSave},
	}
	o := c.open(root, "a study file", topKeys)
	if o == nil {
		return f
	}
	if o.require("stream", "it says where events come from") && o.get("stream") != nil {
		c.stream(o.get("stream"), f)
	}
	c.readings(o.get("readings"), f.Plan)
	c.limits(o.get("limits"), &f.Plan.Limits)
	if o.require("studies", "it lists what is followed and estimated") && o.get("studies") != nil {
		c.studies(o.get("studies"), f)
	}
	c.sinks(o.get("sinks"), f)
	c.state(o.get("state"), &f.State)
	c.apart(f, root)
	if len(c.faults) > 0 {
		return f
	}
	if err := f.Plan.Compile(); err != nil {
		c.fault(o.key("studies"), "this is more than the program can hold: %s", err)
	}
	f.prints()
	return f
}

func (c *checker) readings(n *node, p *online.Plan) {
	if n == nil {
		return
	}
	o := c.open(n, "readings", keys("every", "level"))
	if o == nil {
		return
	}
	p.Every = c.duration(o.get("every"), "readings.every", time.Millisecond, p.Every)
	if level, ok := c.number(o.get("level"), "readings.level", "a number between 0.5 and 1, as in 0.95",
		func(x float64) bool { return x > 0.5 && x < 1 }); ok {
		p.Level = level
	}
}

func (c *checker) limits(n *node, l *online.Limits) {
	if n == nil {
		return
	}
	o := c.open(n, "limits", keys("units", "rows", "segments"))
	if o == nil {
		return
	}
	l.Units = c.count(o.get("units"), "limits.units", l.Units)
	l.Rows = c.count(o.get("rows"), "limits.rows", l.Rows)
	l.Segments = c.count(o.get("segments"), "limits.segments", l.Segments)
}

func (c *checker) state(n *node, s *State) {
	if n == nil {
		return
	}
	o := c.open(n, "state", keys("dir", "every"))
	if o == nil {
		return
	}
	if dir, ok := c.text(o.get("dir"), "state.dir"); ok {
		s.Dir = c.resolve(dir)
	}
	s.Every = c.duration(o.get("every"), "state.every", time.Millisecond, s.Every)
}

// resolve makes a path of the file one from here: relative ones start from the file's folder.
func (c *checker) resolve(path string) string {
	if filepath.IsAbs(path) {
		return filepath.Clean(path)
	}
	return filepath.Join(filepath.Dir(c.path), path)
}

// studies reads the list of studies.
func (c *checker) studies(n *node, f *File) {
	p := f.Plan
	if n.kind != list || len(n.items) == 0 {
		c.fault(n, "studies is a list with at least one study")
		return
	}
	named := map[string]*node{}
	for _, item := range n.items {
		s, w, name := c.study(item, p)
		f.written = append(f.written, w)
		if name != nil {
			if first := named[s.Name]; first != nil {
				c.fault(name, "a second study is called `%s`; the first is in line %d", s.Name, first.place.line)
			}
			named[s.Name] = name
		}
		p.Studies = append(p.Studies, s)
	}
	if len(p.Studies) > maxStudies {
		c.fault(n, "the file has %d studies; it can have %d", len(p.Studies), maxStudies)
	}
}
