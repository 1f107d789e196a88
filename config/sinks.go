package config

import (
	"path/filepath"
	"strings"
)

// Sinks say where readings and alarms go; nil ones are not used.
type Sinks struct {
	Prometheus *Prometheus
	File       *FileSink
}

// Prometheus is a page of metrics to be scraped.
type Prometheus struct{ Listen string }

// FileSink writes readings and alarms as lines of JSON.
type FileSink struct {
	Path   string
	Alarms string
	Rotate Rotate
}

// Rotate says when the file of readings is put aside and a new one begun: before it
// would exceed Size bytes, keeping the Keep youngest of those put aside. Size 0:
// never. The file of alarms is never rotated, so that none is ever thrown away.
type Rotate struct {
	Size int64
	Keep int
}

var sinkKeys = keys("prometheus", "file").
	with("the Kafka sink", "kafka").with("the webhook sink", "webhook").with("the SQL sink", "sql").
	with("the OTLP sink", "otlp").with("the board", "board")

func (c *checker) sinks(n *node, f *File) {
	if n == nil {
		return
	}
	o := c.open(n, "sinks", sinkKeys)
	if o == nil {
		return
	}
	if v := o.get("prometheus"); v != nil {
		f.Sinks.Prometheus = c.prometheus(v)
	}
	if v := o.get("file"); v != nil {
		f.Sinks.File = c.fileSink(v)
	}
}

func (c *checker) prometheus(n *node) *Prometheus {
	p := &Prometheus{Listen: "127.0.0.1:9464"}
	o := c.open(n, "sinks.prometheus", keys("listen"))
	if o == nil {
		return p
	}
	v := o.get("listen")
	if v == nil {
		return p
	}
	if v.kind == scalar && strings.HasPrefix(v.text, ":") {
		c.fault(v, "`%s` would listen on every network this machine is on", v.text).
			ways("keep it to this machine: 127.0.0.1"+v.text, "open it on purpose: 0.0.0.0"+v.text)
		return p
	}
	host, ok := c.address(v, "sinks.prometheus.listen")
	if !ok {
		return p
	}
	if !loopback(host) {
		c.warnings = append(c.warnings, c.source.fault(v.place, c.width(v),
			"metrics are open to whoever reaches %s: the page asks for no password", v.text))
	}
	p.Listen = v.text
	return p
}

func (c *checker) fileSink(n *node) *FileSink {
	s := &FileSink{}
	o := c.open(n, "sinks.file", keys("path", "alarms", "rotate"))
	if o == nil {
		return s
	}
	o.require("path", "where readings are written")
	s.Path = c.pathText(o.get("path"), "sinks.file.path")
	s.Alarms = filepath.Join(filepath.Dir(s.Path), "alarms.jsonl")
	if o.get("alarms") != nil {
		s.Alarms = c.pathText(o.get("alarms"), "sinks.file.alarms")
	}
	if v := o.get("rotate"); v != nil {
		if r := c.open(v, "sinks.file.rotate", keys("size", "keep")); r != nil {
			r.require("size", "the file is put aside when it has grown so far")
			s.Rotate.Size = c.size(r.get("size"), "sinks.file.rotate.size", 4<<10, 1<<40, 0)
			s.Rotate.Keep = c.count(r.get("keep"), "sinks.file.rotate.keep", 10)
		}
	}
	return s
}

// apart finds fault with files that would overwrite or feed one another.
func (c *checker) apart(f *File, root *node) {
	taken := map[string]string{}
	claim := func(path, who string, n *node) {
		if path == "" || path == "-" || n == nil {
			return
		}
		if other := taken[path]; other != "" {
			c.fault(n, "%s and %s are the same file, %s", who, other, path)
		}
		taken[path] = who
	}
	if f.Stream.File != nil {
		claim(f.Stream.File.Path, "stream.file.path", root.find("stream", "file", "path"))
	}
	claim(f.Stream.Reject, "stream.reject.path", root.find("stream", "reject", "path"))
	if s := f.Sinks.File; s != nil && s.Path != "" {
		claim(s.Path, "sinks.file.path", root.find("sinks", "file", "path"))
		at := root.find("sinks", "file", "alarms")
		if at == nil {
			at = root.find("sinks", "file", "path")
		}
		claim(s.Alarms, "sinks.file.alarms", at)
	}
}

// find follows keys down from a mapping, nil where the path ends early.
func (n *node) find(path ...string) *node {
	for _, name := range path {
		_, value := n.child(name)
		if value == nil {
			return nil
		}
		n = value
	}
	return n
}
