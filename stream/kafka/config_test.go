package kafka

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"
)

func TestSettingsThatCannotBe(t *testing.T) {
	notPEM := filepath.Join(t.TempDir(), "ca.pem")
	if err := os.WriteFile(notPEM, []byte("no certificate"), 0o600); err != nil {
		t.Fatal(err)
	}
	for _, tt := range []struct {
		bend func(*Config)
		want string
	}{
		{func(c *Config) { c.Brokers = nil }, "brokers: none given"},
		{func(c *Config) { c.Brokers = []string{"a:1", ""} }, `brokers[1]: got ""`},
		{func(c *Config) { c.Brokers = []string{":9092"} }, `brokers[0]: got ":9092"`},
		{func(c *Config) { c.Topics = nil }, "topics: none given"},
		{func(c *Config) { c.Topics = []string{"harbour events"} }, `topics[0]: got "harbour events"`},
		{func(c *Config) { c.Topics = []string{".."} }, `topics[0]: got ".."`},
		{func(c *Config) { c.Topics = []string{"a", "b", "a"} }, `topics[2]: "a" is given twice`},
		{func(c *Config) { c.MaxWait = time.Second }, "max wait: got 1s, want 10ms to 500ms"},
		{func(c *Config) { c.MaxBytes = 12 }, "max bytes: got 12"},
		{func(c *Config) { c.Refresh = -1 }, "refresh: got -1ns"},
		{func(c *Config) { c.SASL = &SASL{"gssapi", "mara", "x"} }, `mechanism: got "gssapi", want plain, scram-sha-256 or scram-sha-512`},
		{func(c *Config) { c.SASL = &SASL{Mechanism: "plain"} }, "the user is empty"},
		{func(c *Config) { c.TLS = &TLS{CAFile: "nowhere.pem"} }, "nowhere.pem"},
		{func(c *Config) { c.TLS = &TLS{CAFile: notPEM} }, "holds no certificate"},
		{func(c *Config) { c.TLS = &TLS{CertFile: "a.pem"} }, "needs both"},
		{func(c *Config) { c.TLS = &TLS{CertFile: "a.pem", KeyFile: "b.pem"} }, "client certificate a.pem with key b.pem"},
	} {
		conf := Config{Brokers: []string{"127.0.0.1"}, Topics: []string{"harbour.events"}}
		if _, err := New(conf); err != nil {
			t.Fatal(err)
		}
		tt.bend(&conf)
		if _, err := New(conf); err == nil || !strings.Contains(err.Error(), tt.want) {
			t.Errorf("got %v, want %q", err, tt.want)
		}
	}
	_, err := New(Config{Topics: []string{"a b"}, SASL: &SASL{}})
	for _, want := range []string{"brokers", "topics[0]", "sasl"} {
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("all at once: %q is not in %v", want, err)
		}
	}
}

func TestDefaults(t *testing.T) {
	c := Config{Brokers: []string{"quay", "pier:9999", "::1"}}.withDefaults()
	if got := strings.Join(c.Brokers, " "); got != "quay:9092 pier:9999 [::1]:9092" {
		t.Errorf("brokers %s", got)
	}
	for from, want := range map[From]string{Earliest(): "earliest", Latest(): "latest", At(time.UnixMilli(1_772_000_000_000)): "2026-02-25T06:13:20Z"} {
		if got := from.String(); got != want {
			t.Errorf("from %s, want %s", got, want)
		}
	}
}

func TestPauses(t *testing.T) {
	for tries, want := range map[int]time.Duration{1: 100 * time.Millisecond, 2: 200 * time.Millisecond, 4: 800 * time.Millisecond, 7: 5 * time.Second, 100_000: 5 * time.Second} {
		for range 200 {
			if d := nextPause(tries, 5*time.Second); d < want/2 || d > want {
				t.Errorf("pause %d: %v, want %v to %v", tries, d, want/2, want)
			}
		}
	}
}
