package kafka

import (
	"crypto/tls"
	"crypto/x509"
	"errors"
	"fmt"
	"net"
	"os"
	"regexp"
	"slices"
	"time"

	"github.com/segmentio/kafka-go/sasl"
	"github.com/segmentio/kafka-go/sasl/plain"
	"go.uber.org/zap"
)

// Config says which topics of which cluster are read, and how.
type Config struct {
	Brokers  []string // "host:port" (port 9092 if left out); any of them leads to the whole cluster
	Topics   []string // each with all its partitions
	Group    string   // whose committed offsets Commit writes; "" commits nothing
	From     From     // where a partition begins of which nothing is known
	TLS      *TLS     // nil: plain connections
	SASL     *SASL    // nil: no authentication
	ClientID string   // as brokers log it; "stillwell" if empty
	Log      *zap.Logger

	MaxWait        time.Duration // how long a broker may hold an empty fetch: 10ms to 500ms; 0 is 500ms
	MaxBytes       int           // of one fetch, as it travels: 1 KiB to 256 MiB; 0 is 1 MiB. A larger batch still comes
	DialTimeout    time.Duration // for connecting, TLS and SASL together; 0 is 10s
	RequestTimeout time.Duration // for an answer, after MaxWait; 0 is 15s
	Refresh        time.Duration // how often new partitions are looked for; 0 is 10s

	longPause time.Duration // between attempts, at most; 0 is 5s. Tests have less patience.
}

// TLS is how a broker is recognised, and how it recognises us. The zero value trusts the system's authorities.
type TLS struct {
	CAFile     string // PEM; replaces the system's authorities
	CertFile   string // PEM, with KeyFile: a client certificate
	KeyFile    string
	ServerName string // "": the host as dialled
}

// SASL is a name and a password. The password is never logged.
type SASL struct {
	Mechanism string // plain, scram-sha-256 or scram-sha-512
	User      string
	Password  string
}

// From is the place to begin at where no position is known. The zero value is Earliest.
type From struct {
	latest bool
	at     time.Time
}

// Earliest begins at the first message that is still there.
func Earliest() From { return From{} }

// Latest begins after the last message that is there.
func Latest() From { return From{latest: true} }

// At begins at the first message with a timestamp of t or later; after the last one if there is none.
func At(t time.Time) From { return From{at: t} }

func (f From) String() string {
	switch {
	case f.latest:
		return "latest"
	case !f.at.IsZero():
		return f.at.UTC().Format(time.RFC3339Nano)
	}
	return "earliest"
}

// Timestamps with a meaning of their own in a ListOffsets request.
const (
	atLatest   = -1
	atEarliest = -2
)

// stamp is the place in the terms of a ListOffsets request.
func (f From) stamp() int64 {
	switch {
	case f.latest:
		return atLatest
	case !f.at.IsZero():
		return max(f.at.UnixMilli(), 0)
	}
	return atEarliest
}

func (c Config) withDefaults() Config {
	c.Brokers = slices.Clone(c.Brokers)
	for i, b := range c.Brokers {
		if _, _, err := net.SplitHostPort(b); err != nil && b != "" {
			c.Brokers[i] = net.JoinHostPort(b, "9092")
		}
	}
	setDefault(&c.ClientID, "stillwell")
	setDefault(&c.MaxWait, 500*time.Millisecond)
	setDefault(&c.MaxBytes, 1<<20)
	setDefault(&c.DialTimeout, 10*time.Second)
	setDefault(&c.RequestTimeout, 15*time.Second)
	setDefault(&c.Refresh, 10*time.Second)
	setDefault(&c.longPause, 5*time.Second)
	if c.Log == nil {
		c.Log = zap.NewNop()
	}
	return c
}

func setDefault[T comparable](v *T, to T) {
	var zero T
	if *v == zero {
		*v = to
	}
}

var topicName = regexp.MustCompile(`^[a-zA-Z0-9._-]{1,249}$`)

// check finds everything that is wrong, and changes nothing.
func (c Config) check() error {
	var errs []error
	bad := func(format string, a ...any) { errs = append(errs, fmt.Errorf("kafka: "+format, a...)) }

	if len(c.Brokers) == 0 {
		bad("brokers: none given, want at least one host:port")
	}
	for i, b := range c.Brokers {
		if host, port, err := net.SplitHostPort(b); err != nil || host == "" || port == "" {
			bad("brokers[%d]: got %q, want host:port", i, b)
		}
	}
	if len(c.Topics) == 0 {
		bad("topics: none given, want at least one")
	}
	for i, t := range c.Topics {
		switch {
		case !topicName.MatchString(t) || t == "." || t == "..":
			bad("topics[%d]: got %q, want 1 to 249 letters, digits, '.', '_' or '-'", i, t)
		case slices.Index(c.Topics, t) < i:
			bad("topics[%d]: %q is given twice", i, t)
		}
	}
	if c.MaxWait < 10*time.Millisecond || c.MaxWait > 500*time.Millisecond {
		bad("max wait: got %v, want 10ms to 500ms", c.MaxWait)
	}
	if c.MaxBytes < 1<<10 || c.MaxBytes > 256<<20 {
		bad("max bytes: got %d, want 1 KiB to 256 MiB", c.MaxBytes)
	}
	positive := func(name string, d time.Duration) {
		if d <= 0 {
			bad("%s: got %v, want more than 0", name, d)
		}
	}
	positive("dial timeout", c.DialTimeout)
	positive("request timeout", c.RequestTimeout)
	positive("refresh", c.Refresh)
	if c.SASL != nil {
		if _, err := c.SASL.mechanism(); err != nil {
			errs = append(errs, err)
		}
	}
	return errors.Join(errs...)
}

// mechanism is the SASL exchange asked for.
func (s *SASL) mechanism() (sasl.Mechanism, error) {
	if s.User == "" {
		return nil, errors.New("kafka: sasl: the user is empty")
	}
	switch s.Mechanism {
	case "plain":
		return plain.Mechanism{Username: s.User, Password: s.Password}, nil
	case "scram-sha-256":
		return scram{name: "SCRAM-SHA-256", hash: sha256Hash, user: s.User, password: s.Password}, nil
	case "scram-sha-512":
		return scram{name: "SCRAM-SHA-512", hash: sha512Hash, user: s.User, password: s.Password}, nil
	}
	return nil, fmt.Errorf("kafka: sasl: mechanism: got %q, want plain, scram-sha-256 or scram-sha-512", s.Mechanism)
}

// load reads the files named.
func (t *TLS) load() (*tls.Config, error) {
	out := &tls.Config{ServerName: t.ServerName, MinVersion: tls.VersionTLS12}
	if t.CAFile != "" {
		pem, err := os.ReadFile(t.CAFile)
		if err != nil {
			return nil, fmt.Errorf("kafka: tls: authorities: %w", err)
		}
		out.RootCAs = x509.NewCertPool()
		if !out.RootCAs.AppendCertsFromPEM(pem) {
			return nil, fmt.Errorf("kafka: tls: %s holds no certificate in PEM form", t.CAFile)
		}
	}
	if (t.CertFile == "") != (t.KeyFile == "") {
		return nil, errors.New("kafka: tls: a client certificate needs both its certificate file and its key file")
	}
	if t.CertFile != "" {
		pair, err := tls.LoadX509KeyPair(t.CertFile, t.KeyFile)
		if err != nil {
			return nil, fmt.Errorf("kafka: tls: client certificate %s with key %s: %w", t.CertFile, t.KeyFile, err)
		}
		out.Certificates = []tls.Certificate{pair}
	}
	return out, nil
}
