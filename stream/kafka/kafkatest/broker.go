package kafkatest

import (
	"bytes"
	"crypto/rand"
	"encoding/base64"
	"fmt"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/twmb/franz-go/pkg/kgo"
	"github.com/twmb/franz-go/pkg/sasl/scram"
)

// Options of a broker. The zero value is an open one, on plain TCP.
type Options struct {
	// Users, by name, with their passwords: adds a listener with TLS and SCRAM-SHA-512, Broker.Secure.
	Users map[string]string
	// Settings of the broker that replace ours or come on top.
	Settings map[string]string
}

// A Broker is a real Kafka of one node, in a process of its own. The Client beside it is connected to it.
type Broker struct {
	*Client
	Addr   string // plain, no questions asked: "127.0.0.1:port"
	Secure string // with TLS and SCRAM-SHA-512; "" without users
	CAFile string // what to trust at Secure

	t    testing.TB
	dir  string
	jars string
	cmd  *exec.Cmd
	gone chan struct{} // closed when cmd has ended
}

// Start starts a broker with an empty log, and waits until it answers. It is stopped, and its data removed, with
// the test. If the test has failed by then, the end of the broker's log is shown.
func Start(t testing.TB, opts Options) *Broker {
	t.Helper()
	b := &Broker{t: t, dir: t.TempDir(), jars: jars(t)}
	ports := freePorts(t, 3)
	b.Addr = ports[0]
	settings := map[string]string{
		"process.roles":                            "broker,controller",
		"node.id":                                  "1",
		"controller.quorum.voters":                 "1@" + ports[1],
		"controller.listener.names":                "CONTROLLER",
		"listeners":                                "PLAINTEXT://" + ports[0] + ",CONTROLLER://" + ports[1],
		"advertised.listeners":                     "PLAINTEXT://" + ports[0],
		"listener.security.protocol.map":           "CONTROLLER:PLAINTEXT,PLAINTEXT:PLAINTEXT,SECURE:SASL_SSL",
		"inter.broker.listener.name":               "PLAINTEXT",
		"log.dirs":                                 filepath.Join(b.dir, "data"),
		"offsets.topic.replication.factor":         "1",
		"offsets.topic.num.partitions":             "4",
		"transaction.state.log.replication.factor": "1",
		"transaction.state.log.min.isr":            "1",
		"transaction.state.log.num.partitions":     "4",
		"group.initial.rebalance.delay.ms":         "0",
		"broker.session.timeout.ms":                "3000", // after a crash the controller waits for so long
		"broker.heartbeat.interval.ms":             "500",
		"auto.create.topics.enable":                "true", // the default: a reader that asks carelessly makes topics
		"log.initial.task.delay.ms":                "1000",
		"log.retention.check.interval.ms":          "1000",
	}
	format := []string{"format", "-t", clusterID(), "-c", b.file("server.properties")}
	if len(opts.Users) > 0 {
		b.Secure = ports[2]
		b.CAFile = b.certificates()
		settings["listeners"] += ",SECURE://" + b.Secure
		settings["advertised.listeners"] += ",SECURE://" + b.Secure
		settings["sasl.enabled.mechanisms"] = "SCRAM-SHA-512,SCRAM-SHA-256"
		const login = "org.apache.kafka.common.security.scram.ScramLoginModule required;"
		settings["listener.name.secure.scram-sha-256.sasl.jaas.config"] = login
		settings["listener.name.secure.scram-sha-512.sasl.jaas.config"] = login
		settings["ssl.keystore.type"] = "PEM"
		settings["ssl.keystore.location"] = b.file("broker.pem")
		for name, password := range opts.Users {
			for _, mechanism := range []string{"SCRAM-SHA-256", "SCRAM-SHA-512"} {
				format = append(format, "--add-scram", fmt.Sprintf("%s=[name=%s,password=%s]", mechanism, name, password))
			}
		}
	}
	for k, v := range opts.Settings {
		settings[k] = v
	}
	var text strings.Builder
	for k, v := range settings {
		fmt.Fprintf(&text, "%s=%s\n", k, v)
	}
	b.write("server.properties", text.String())
	b.run("kafka.tools.StorageTool", format...)

	t.Cleanup(func() {
		b.Kill() // nobody needs what it would write at an orderly end
		if t.Failed() {
			b.showLog()
		}
	})
	b.launch()
	b.Client = NewClient(t, []string{b.Addr})
	b.await()
	return b
}

// Stop ends the broker in good order: it hands over and writes what it has.
func (b *Broker) Stop() { b.end(syscall.SIGTERM) }

// Kill ends the broker as a crash does.
func (b *Broker) Kill() { b.end(syscall.SIGKILL) }

// Restart starts a broker that was ended, at the same addresses and with its data.
func (b *Broker) Restart() {
	b.t.Helper()
	b.launch()
	b.await()
}

// SecureClient connects as a user, through TLS.
func (b *Broker) SecureClient(user, password string) *Client {
	b.t.Helper()
	conf, err := trusting(b.CAFile)
	if err != nil {
		b.t.Fatal(err)
	}
	auth := scram.Auth{User: user, Pass: password}.AsSha512Mechanism()
	return NewClient(b.t, []string{b.Secure}, kgo.DialTLSConfig(conf), kgo.SASL(auth))
}

func (b *Broker) launch() {
	b.t.Helper()
	log, err := os.OpenFile(b.file("kafka.log"), os.O_CREATE|os.O_APPEND|os.O_WRONLY, 0o644)
	if err != nil {
		b.t.Fatal(err)
	}
	defer log.Close()
	const logger = "-Dorg.slf4j.simpleLogger."
	b.cmd = b.java("-Xmx512m", logger+"showDateTime=true", logger+"dateTimeFormat=HH:mm:ss.SSS",
		logger+"log.org.apache.kafka.common.config=warn", // else hundreds of lines of settings
		"kafka.Kafka", b.file("server.properties"))
	b.cmd.Stdout, b.cmd.Stderr, b.cmd.Dir = log, log, b.dir
	if err := b.cmd.Start(); err != nil {
		b.t.Fatalf("start broker: %v", err)
	}
	b.gone = make(chan struct{})
	go func() {
		b.cmd.Wait()
		close(b.gone)
	}()
}

func (b *Broker) end(how syscall.Signal) {
	b.cmd.Process.Signal(how)
	select {
	case <-b.gone:
	case <-time.After(30 * time.Second):
		b.t.Logf("the broker does not end on %v", how)
		b.cmd.Process.Kill()
		<-b.gone
	}
}

// await waits until the broker answers.
func (b *Broker) await() {
	b.t.Helper()
	deadline := time.Now().Add(patience)
	for {
		ctx, cancel := deadlined(time.Second)
		err := b.Ping(ctx)
		cancel()
		if err == nil {
			return
		}
		select {
		case <-b.gone:
			b.showLog()
			b.t.Fatalf("the broker has ended: %v", b.cmd.ProcessState)
		case <-time.After(50 * time.Millisecond):
		}
		if time.Now().After(deadline) {
			b.showLog()
			b.t.Fatalf("the broker does not answer: %v", err)
		}
	}
}

// java is a program out of the jars: options, class and arguments. It starts soon rather than running fast for long.
func (b *Broker) java(args ...string) *exec.Cmd {
	base := []string{"-XX:TieredStopAtLevel=1", "-XX:+UseSerialGC", "-cp", filepath.Join(b.jars, "*")}
	return exec.Command("java", append(base, args...)...)
}

// clusterID is a name for a new cluster: a random UUID, in the form of Kafka's own.
func clusterID() string {
	var id [16]byte
	rand.Read(id[:])
	id[0] &= 0x7f // no leading dash, which would be taken for an option
	return base64.RawURLEncoding.EncodeToString(id[:])
}

// run runs one of Kafka's tools and returns what it prints.
func (b *Broker) run(class string, args ...string) string {
	b.t.Helper()
	var out, errs bytes.Buffer
	cmd := b.java(append([]string{class}, args...)...)
	cmd.Stdout, cmd.Stderr = &out, &errs
	if err := cmd.Run(); err != nil {
		b.t.Fatalf("%s %v: %v\n%s%s", class, args, err, out.String(), errs.String())
	}
	return out.String()
}

func (b *Broker) showLog() {
	text, err := os.ReadFile(b.file("kafka.log"))
	if err != nil {
		b.t.Log(err)
		return
	}
	lines := strings.Split(strings.TrimSpace(string(text)), "\n")
	b.t.Logf("the end of the broker's log:\n%s", strings.Join(lines[max(0, len(lines)-60):], "\n"))
}

func (b *Broker) file(name string) string { return filepath.Join(b.dir, name) }

func (b *Broker) write(name, text string) {
	b.t.Helper()
	if err := os.WriteFile(b.file(name), []byte(text), 0o600); err != nil {
		b.t.Fatal(err)
	}
}

// freePorts are addresses that nobody listened on a moment ago.
func freePorts(t testing.TB, n int) []string {
	t.Helper()
	out := make([]string, n)
	for i := range out {
		l, err := net.Listen("tcp", "127.0.0.1:0")
		if err != nil {
			t.Fatal(err)
		}
		defer l.Close() // all are held until all are found
		out[i] = l.Addr().String()
	}
	return out
}
