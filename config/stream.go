package config

import (
	"net"
	"path/filepath"
	"strconv"
	"strings"
	"time"

	"stillwell/online"
)

// Stream says where events come from and how they are read. Exactly one of Kafka
// and File is set.
type Stream struct {
	Kafka *Kafka
	File  *FileSource

	CSV      bool // lines of CSV; else JSON
	Time     TimeField
	ID       string // the field that tells duplicates; empty: none
	IDSlot   int    // its slot in the plan's fields; -1: none
	Lateness time.Duration
	Remember time.Duration // how long ids are remembered
	Ahead    time.Duration // how far beyond its message's timestamp an event may be dated
	From, To int64         // earlier and later event times are malformed; Unix nanoseconds
	Idle     time.Duration // a silent partition is left out of the watermark after this
	Silent   time.Duration // a stream without events raises an alarm after this
	Reject   string        // file that keeps malformed events; empty: none
	MaxLine  int           // bytes of an event
}

// TimeField says how an event's time is read: from its message if Kafka, else from a
// field, as RFC 3339 or as a number of Units since the epoch.
type TimeField struct {
	Kafka bool
	Field string
	Slot  int           // in the plan's fields; -1 if Kafka
	Unit  time.Duration // 0: RFC 3339
}

// Kafka says which topics are read and how.
type Kafka struct {
	Brokers, Topics []string
	Group           string
	Latest          bool  // without a checkpoint, begin at the end; else at the beginning
	Since           int64 // or at this time, Unix nanoseconds; online.NoTime if not given
	TLS             *TLS  // nil: none
	SASL            *SASL // nil: none
}

// TLS names files of certificates; empty ones stand for the system's roots and for no client certificate.
type TLS struct{ CAFile, CertFile, KeyFile string }

// SASL says who the program is to the brokers; the password is in an environment variable.
type SASL struct{ Mechanism, User, PasswordEnv string }

// FileSource is a file of events, one a line; "-" is standard input.
type FileSource struct {
	Path   string
	Follow bool // wait for more at its end
}

var streamKeys = keys("kafka", "file", "http", "format", "time", "id", "lateness", "remember", "ahead",
	"between", "idle", "silent", "reject", "max_line")

func (c *checker) stream(n *node, f *File) {
	s := &f.Stream
	*s = Stream{
		IDSlot: -1, Ahead: time.Hour, Idle: time.Minute, Silent: 10 * time.Minute, MaxLine: 1 << 20,
		From: time.Date(2000, 1, 1, 0, 0, 0, 0, time.UTC).UnixNano(),
		To:   time.Date(2100, 1, 1, 0, 0, 0, 0, time.UTC).UnixNano(),
	}
	o := c.open(n, "stream", streamKeys)
	if o == nil {
		return
	}
	from := o.oneOf("where events come from", "kafka", "file", "http")
	if v := o.get(from); v != nil {
		switch from {
		case "kafka":
			s.Kafka = c.kafka(v)
		case "file":
			s.File = c.fileSource(v)
			if path := v.find("path"); path != nil {
				f.sourceFile = filepath.Clean(path.text)
			}
		case "http":
			c.fault(o.key(from), "events over HTTP are not yet available in this version; use kafka or file")
		}
	}
	s.CSV = c.choice(o.get("format"), "stream.format", "json", "json", "csv") == "csv"
	if o.require("time", "event time decides every number") && o.get("time") != nil {
		c.time(o.get("time"), from, f)
	}
	if id, ok := c.field(o.get("id"), "stream.id"); ok {
		s.ID, s.IDSlot = id, f.Plan.Fields.Slot(id)
	}
	s.Lateness = c.duration(o.get("lateness"), "stream.lateness", 0, 0)
	s.Remember = c.duration(o.get("remember"), "stream.remember", 0, s.Lateness)
	if v := o.get("remember"); v != nil && s.Remember < s.Lateness {
		c.fault(v, "stream.remember is shorter than stream.lateness (%s): an event could come twice within the lateness and count twice", FormatDuration(s.Lateness))
	}
	if o.has("remember") && !o.has("id") {
		c.fault(o.key("remember"), "`remember` is for ids, and the stream has none").ways("name the field with `id`", "leave `remember` away")
	}
	s.Ahead = c.duration(o.get("ahead"), "stream.ahead", 0, s.Ahead)
	s.Idle = c.duration(o.get("idle"), "stream.idle", time.Millisecond, s.Idle)
	s.Silent = c.duration(o.get("silent"), "stream.silent", time.Millisecond, s.Silent)
	c.between(o.get("between"), s)
	s.MaxLine = int(c.size(o.get("max_line"), "stream.max_line", 64, 256<<20, int64(s.MaxLine)))
	if v := o.get("reject"); v != nil {
		if r := c.open(v, "stream.reject", keys("path")); r != nil {
			r.require("path", "malformed events are kept there")
			s.Reject = c.pathText(r.get("path"), "stream.reject.path")
		}
	}
}

// pathText reads a path and resolves it.
func (c *checker) pathText(n *node, what string) string {
	if text, ok := c.text(n, what); ok {
		return c.resolve(text)
	}
	return ""
}

func (c *checker) between(n *node, s *Stream) {
	if n == nil {
		return
	}
	if n.kind != list || len(n.items) != 2 {
		c.fault(n, "stream.between is a list of two times, the earliest and the latest that an event may have").
			allow("[2000-01-01T00:00:00Z, 2100-01-01T00:00:00Z]")
		return
	}
	from := c.instant(n.items[0], "stream.between", s.From)
	to := c.instant(n.items[1], "stream.between", s.To)
	if from >= to {
		c.fault(n.items[1], "stream.between ends before it begins")
	}
	s.From, s.To = from, to
}

var timeUnits = map[string]time.Duration{"s": time.Second, "ms": time.Millisecond, "us": time.Microsecond, "ns": time.Nanosecond}

// time reads how event time is found; source is the key of the stream's source.
func (c *checker) time(n *node, source string, f *File) {
	t := &f.Stream.Time
	t.Slot = -1
	if n.kind == scalar {
		c.timeField(n, f)
		return
	}
	o := c.open(n, "stream.time", keys("field", "unix", "kafka"))
	if o == nil {
		return
	}
	if o.oneOf("where an event's time is: in a field, or in the message's timestamp", "field", "kafka") == "kafka" {
		c.choice(o.get("kafka"), "stream.time.kafka", "", "timestamp")
		o.refuse("the message's timestamp has its own unit", "unix")
		if source != "kafka" {
			c.fault(o.key("kafka"), "only messages of Kafka have a timestamp, and this stream is no Kafka stream").ways("name the event's field: time: ts")
		}
		t.Kafka = true
		return
	}
	c.timeField(o.get("field"), f)
	if o.get("unix") != nil {
		t.Unit = timeUnits[c.choice(o.get("unix"), "stream.time.unix", "", "s", "ms", "us", "ns")]
	}
}

func (c *checker) timeField(n *node, f *File) {
	if field, ok := c.field(n, "stream.time"); ok {
		f.Stream.Time.Field, f.Stream.Time.Slot = field, f.Plan.Fields.Slot(field)
	}
}

func (c *checker) fileSource(n *node) *FileSource {
	s := &FileSource{}
	o := c.open(n, "stream.file", keys("path", "follow"))
	if o == nil {
		return s
	}
	o.require("path", "the file of events, or - for standard input")
	s.Follow = c.flag(o.get("follow"), "stream.file.follow")
	if text, ok := c.text(o.get("path"), "stream.file.path"); ok && text == "-" {
		s.Path = text
		if s.Follow {
			c.fault(o.key("follow"), "standard input cannot be followed: it is read until it ends, however long that takes").ways("leave `follow` away")
		}
		return s
	}
	s.Path = c.pathText(o.get("path"), "stream.file.path")
	return s
}

func (c *checker) kafka(n *node) *Kafka {
	k := &Kafka{Group: "stillwell", Since: online.NoTime}
	o := c.open(n, "stream.kafka", keys("brokers", "topics", "group", "from", "tls", "sasl"))
	if o == nil {
		return k
	}
	o.require("brokers", "where the cluster is reached")
	o.require("topics", "what is read")
	k.Brokers = c.list(o.get("brokers"), "stream.kafka.brokers", func(n *node, _ string) (string, bool) {
		_, ok := c.address(n, "a broker")
		return n.text, ok
	})
	k.Topics = c.list(o.get("topics"), "stream.kafka.topics", c.text)
	if group, ok := c.text(o.get("group"), "stream.kafka.group"); ok {
		k.Group = group
	}
	if from, ok := c.text(o.get("from"), "stream.kafka.from"); ok && from != "earliest" {
		if k.Latest = from == "latest"; !k.Latest {
			c.kafkaSince(o.get("from"), from, k)
		}
	}
	if v := o.get("tls"); v != nil {
		k.TLS = c.tls(v)
	}
	if v := o.get("sasl"); v != nil {
		k.SASL = c.sasl(v, k, o.has("tls"))
	}
	return k
}

func (c *checker) kafkaSince(n *node, text string, k *Kafka) {
	if strings.ContainsAny(text, "0123456789") {
		k.Since = c.instant(n, "stream.kafka.from", online.NoTime)
		return
	}
	c.fault(n, "`%s` is no value of stream.kafka.from", text).near(text, []string{"earliest", "latest"}).allow("a time, as in 2026-03-01T00:00:00Z")
}

// address checks HOST:PORT and returns its host.
func (c *checker) address(n *node, what string) (host string, ok bool) {
	text, ok := c.text(n, what)
	if !ok {
		return "", false
	}
	host, port, err := net.SplitHostPort(text)
	if number, e := strconv.ParseUint(port, 10, 16); err != nil || host == "" || e != nil || number > 65535 {
		c.fault(n, "`%s` is no address of %s", text, what).allow("HOST:PORT")
		return "", false
	}
	return host, true
}

func loopback(host string) bool {
	return host == "localhost" || net.ParseIP(host).IsLoopback()
}

func (c *checker) tls(n *node) *TLS {
	t := &TLS{}
	o := c.open(n, "stream.kafka.tls", keys("ca_file", "cert_file", "key_file"))
	if o == nil {
		return t
	}
	t.CAFile = c.pathText(o.get("ca_file"), "stream.kafka.tls.ca_file")
	t.CertFile = c.pathText(o.get("cert_file"), "stream.kafka.tls.cert_file")
	t.KeyFile = c.pathText(o.get("key_file"), "stream.kafka.tls.key_file")
	if o.has("cert_file") != o.has("key_file") {
		c.fault(n, "stream.kafka.tls has one of `cert_file` and `key_file`; a client certificate needs both")
	}
	return t
}

func (c *checker) sasl(n *node, k *Kafka, tls bool) *SASL {
	s := &SASL{}
	o := c.open(n, "stream.kafka.sasl", keys("mechanism", "user", "password_env"))
	if o == nil {
		return s
	}
	o.require("mechanism", "how the program proves who it is")
	o.require("user", "who it is")
	o.require("password_env", "the environment variable that holds the password")
	s.Mechanism = c.choice(o.get("mechanism"), "stream.kafka.sasl.mechanism", "", "plain", "scram-sha-256", "scram-sha-512")
	s.User, _ = c.text(o.get("user"), "stream.kafka.sasl.user")
	if v := o.get("password_env"); v != nil {
		c.name(v, "an environment variable", identifier, identifierLetters)
		s.PasswordEnv = v.text
	}
	if v := o.get("mechanism"); v != nil && v.text == "plain" && !tls {
		for _, b := range k.Brokers {
			if host, _, err := net.SplitHostPort(b); err == nil && !loopback(host) {
				c.fault(v, "plain sends the password readable to everyone between here and %s", b).
					ways("encrypt the connection: tls: {}", "use scram-sha-256 or scram-sha-512")
				break
			}
		}
	}
	return s
}
