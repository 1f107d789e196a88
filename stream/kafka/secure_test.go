package kafka

import (
	"crypto/tls"
	"crypto/x509"
	"encoding/pem"
	"errors"
	"net/http/httptest"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	kafkago "github.com/segmentio/kafka-go"
	"github.com/twmb/franz-go/pkg/kfake"
)

// The exchange printed in RFC 7677, section 3; that of RFC 5802, section 5, is its like for SHA-1.
func TestScramAgainstItsStandard(t *testing.T) {
	m := scram{name: "SCRAM-SHA-256", hash: sha256Hash, user: "user", password: "pencil", nonce: "rOprNGfwEbeRWgbNEkqO"}
	x, first, err := m.Start(t.Context())
	if err != nil || string(first) != "n,,n=user,r=rOprNGfwEbeRWgbNEkqO" {
		t.Fatalf("first message %q, %v", first, err)
	}
	done, final, err := x.Next(t.Context(), []byte("r=rOprNGfwEbeRWgbNEkqO%hvYDpWUa2RaTCAfuxFIlj)hNlF$k0,s=W22ZaJ0SNY7soEsUEjb6gQ==,i=4096"))
	const want = "c=biws,r=rOprNGfwEbeRWgbNEkqO%hvYDpWUa2RaTCAfuxFIlj)hNlF$k0,p=dHzbZapWIk4jUhN+Ute9ytag9zjfMHgsqmmiz7AndVQ="
	if done || err != nil || string(final) != want {
		t.Fatalf("final message %q, %v, want %q", final, err, want)
	}
	if done, _, err := x.Next(t.Context(), []byte("v=6rriTRBi23WpRR/wtup+mMhUZUn/dB5nLTJRsjl95G4=")); !done || err != nil {
		t.Errorf("the server's proof: %v, %v", done, err)
	}
}

func TestScramDistrustsTheBroker(t *testing.T) {
	const nonce = "rOprNGfwEbeRWgbNEkqO"
	for name, say := range map[string][]string{
		"another nonce":      {"r=xOprNGfwEbeRWgbNEkqO%hv,s=W22ZaJ0SNY7soEsUEjb6gQ==,i=4096"},
		"our nonce alone":    {"r=" + nonce + ",s=W22ZaJ0SNY7soEsUEjb6gQ==,i=4096"},
		"no salt":            {"r=" + nonce + "x,i=4096"},
		"too few rounds":     {"r=" + nonce + "x,s=W22ZaJ0SNY7soEsUEjb6gQ==,i=1"},
		"far too many":       {"r=" + nonce + "x,s=W22ZaJ0SNY7soEsUEjb6gQ==,i=2000000000"},
		"an error":           {"e=unknown-user"},
		"a proof at once":    {"v=6rriTRBi23WpRR/wtup+mMhUZUn/dB5nLTJRsjl95G4="},
		"a proof of another": {"r=" + nonce + "x,s=W22ZaJ0SNY7soEsUEjb6gQ==,i=4096", "v=6rriTRBi23WpRR/wtup+mMhUZUn/dB5nLTJRsjl95G4="},
		"an empty proof":     {"r=" + nonce + "x,s=W22ZaJ0SNY7soEsUEjb6gQ==,i=4096", "v="},
		"an error at last":   {"r=" + nonce + "x,s=W22ZaJ0SNY7soEsUEjb6gQ==,i=4096", "e=invalid-proof"},
	} {
		x, _, _ := scram{hash: sha256Hash, user: "u", password: "p", nonce: nonce}.Start(t.Context())
		var done bool
		var err error
		for _, s := range say {
			done, _, err = x.Next(t.Context(), []byte(s))
		}
		if done || !errors.Is(err, errScram) {
			t.Errorf("%s: done %v, %v, want an error", name, done, err)
		}
	}
}

// secured is a cluster in this process with TLS and two users, and the file to trust it by.
func secured(t *testing.T) (Config, string) {
	t.Helper()
	server := httptest.NewUnstartedServer(nil) // for its certificate of 127.0.0.1
	server.StartTLS()
	defer server.Close()
	ca := filepath.Join(t.TempDir(), "ca.pem")
	text := pem.EncodeToMemory(&pem.Block{Type: "CERTIFICATE", Bytes: server.Certificate().Raw})
	if err := os.WriteFile(ca, text, 0o600); err != nil {
		t.Fatal(err)
	}
	c, err := kfake.NewCluster(kfake.NumBrokers(1), kfake.SeedTopics(1, "harbour.events"), kfake.EnableSASL(),
		kfake.TLS(&tls.Config{Certificates: server.TLS.Certificates}),
		kfake.Superuser("PLAIN", "mara", "sea=legs,1"), kfake.Superuser("SCRAM-SHA-256", "mara", "sea=legs,1"), kfake.Superuser("SCRAM-SHA-512", "ma=r,a", "gangway"))
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(c.Close)
	return Config{Brokers: c.ListenAddrs(), Topics: []string{"harbour.events"}, MaxWait: 50 * time.Millisecond}, ca
}

func TestTLSAndSASL(t *testing.T) {
	conf, ca := secured(t)
	conf.TLS = &TLS{CAFile: ca}
	for _, s := range []SASL{{"plain", "mara", "sea=legs,1"}, {"scram-sha-256", "mara", "sea=legs,1"}, {"scram-sha-512", "ma=r,a", "gangway"}} {
		conf.SASL = &s
		to := newRecorder(t)
		_, stop := start(t, conf, to)
		eventually(t, s.Mechanism, func() bool { return to.look(events0).caughtUp == 0 })
		stop()
	}
}

// What is wrong in the settings ends Run, with a reason; it would not come right by waiting.
func TestRefusedAtStart(t *testing.T) {
	good, ca := secured(t)
	good.TLS = &TLS{CAFile: ca}
	good.SASL = &SASL{"plain", "mara", "sea=legs,1"}
	for _, tt := range []struct {
		name string
		bend func(*Config)
		want any
	}{
		{"plain, wrong password", func(c *Config) { c.SASL = &SASL{"plain", "mara", "seasick"} }, kafkago.SASLAuthenticationFailed},
		{"scram, wrong password", func(c *Config) { c.SASL = &SASL{"scram-sha-256", "mara", "seasick"} }, kafkago.SASLAuthenticationFailed},
		{"unknown user", func(c *Config) { c.SASL = &SASL{"scram-sha-512", "nobody", "x"} }, kafkago.SASLAuthenticationFailed},
		{"authority not trusted", func(c *Config) { c.TLS = &TLS{} }, new(x509.UnknownAuthorityError)},
		{"another server", func(c *Config) { c.TLS = &TLS{CAFile: ca, ServerName: "pier"} }, new(x509.HostnameError)},
	} {
		conf := good
		tt.bend(&conf)
		s, err := New(conf)
		if err != nil {
			t.Fatal(err)
		}
		err = s.Run(t.Context(), newRecorder(t))
		ok := false
		switch want := tt.want.(type) {
		case kafkago.Error:
			ok = errors.Is(err, want)
		default:
			ok = errors.As(err, want)
		}
		if !ok || strings.Contains(err.Error(), "seasick") {
			t.Errorf("%s: %v", tt.name, err)
		}
	}
}

func TestTopicWithoutTheRightToIt(t *testing.T) {
	c, err := kfake.NewCluster(kfake.NumBrokers(1), kfake.SeedTopics(1, "harbour.events"), kfake.EnableSASL(), kfake.EnableACLs(), kfake.User("PLAIN", "mara", "x"))
	if err != nil {
		t.Fatal(err)
	}
	defer c.Close()
	s, err := New(Config{Brokers: c.ListenAddrs(), Topics: []string{"harbour.events"}, SASL: &SASL{"plain", "mara", "x"}})
	if err != nil {
		t.Fatal(err)
	}
	if err := s.Run(t.Context(), newRecorder(t)); !errors.Is(err, kafkago.TopicAuthorizationFailed) || !strings.Contains(err.Error(), "harbour.events") {
		t.Errorf("got %v", err)
	}
}
