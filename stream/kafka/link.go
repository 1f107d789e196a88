package kafka

import (
	"context"
	"crypto/tls"
	"crypto/x509"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"net"
	"time"

	kafkago "github.com/segmentio/kafka-go"
	"github.com/segmentio/kafka-go/protocol"
	"github.com/segmentio/kafka-go/protocol/apiversions"
	"github.com/segmentio/kafka-go/protocol/saslauthenticate"
	"github.com/segmentio/kafka-go/protocol/saslhandshake"
	"github.com/segmentio/kafka-go/sasl"
)

// A dialer opens links to brokers.
type dialer struct {
	clientID string
	tls      *tls.Config    // nil: plain
	sasl     sasl.Mechanism // nil: none
	limit    time.Duration  // for one dial as a whole
	answer   time.Duration  // for one answer
}

// A link is a connection to one broker, authenticated and with the versions it speaks. It carries one request
// at a time. After an error it is of no more use, but still to be closed.
type link struct {
	addr     string
	clientID string
	answer   time.Duration
	conn     net.Conn
	proto    *protocol.Conn // the library's framing and messages, over conn
	speaks   map[protocol.ApiKey]int16
	serial   int32 // of the last request of our own making
	out      []byte
}

// dial connects to the broker at addr, "host:port".
func (d *dialer) dial(ctx context.Context, addr string) (l *link, err error) {
	ctx, cancel := context.WithTimeout(ctx, d.limit)
	defer cancel()
	defer func() {
		if err != nil {
			err = fmt.Errorf("broker %s: %w", addr, err)
		}
	}()
	conn, err := (&net.Dialer{KeepAlive: 30 * time.Second}).DialContext(ctx, "tcp", addr)
	if err != nil {
		return nil, err
	}
	defer func() {
		if err != nil {
			conn.Close()
		}
	}()
	if d.tls != nil {
		conf := d.tls
		if conf.ServerName == "" {
			conf = conf.Clone()
			conf.ServerName, _, _ = net.SplitHostPort(addr)
		}
		secured := tls.Client(conn, conf)
		if err := secured.HandshakeContext(ctx); err != nil {
			return nil, fmt.Errorf("handshake: %w", err)
		}
		conn = secured
	}
	l = &link{addr: addr, clientID: d.clientID, answer: d.answer, conn: conn, proto: protocol.NewConn(conn, d.clientID)}
	if err := l.negotiate(ctx); err != nil {
		return nil, err
	}
	if d.sasl != nil {
		if err := l.authenticate(ctx, d.sasl); err != nil {
			return nil, err
		}
	}
	return l, nil
}

func (l *link) close() { l.conn.Close() }

// within runs a request and its answer under a deadline, and under ctx.
func (l *link) within(ctx context.Context, limit time.Duration, do func() error) error {
	if err := l.conn.SetDeadline(time.Now().Add(limit)); err != nil {
		return err
	}
	stop := context.AfterFunc(ctx, func() { l.conn.SetDeadline(time.Unix(1, 0)) })
	err := do()
	if !stop() { // ctx ended on the way, and with it the use of this link
		l.conn.Close()
		return ctx.Err()
	}
	return err
}

// ask sends one of the library's requests and waits for its answer.
func (l *link) ask(ctx context.Context, req protocol.Message) (res protocol.Message, err error) {
	err = l.within(ctx, l.answer, func() error {
		res, err = l.proto.RoundTrip(req)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("broker %s: %v: %w", l.addr, req.ApiKey(), err)
	}
	return res, nil
}

// maxAnswer bounds the memory that a garbled length can ask for.
const maxAnswer = 512 << 20

// A request that we encode ourselves, where the library lacks it or reads its answer too slowly.
type request struct {
	key      protocol.ApiKey
	version  int16
	flexible bool                // has the newer form of header
	wait     time.Duration       // that the broker is asked to take before it answers
	body     func([]byte) []byte // appends what follows the header
}

// exchange sends a request and reads its answer into buf, or a larger one in its place, without length and serial number.
func (l *link) exchange(ctx context.Context, r request, buf []byte) ([]byte, error) {
	l.serial++
	out := append(l.out[:0], 0, 0, 0, 0) // the length, known at the end
	out = binary.BigEndian.AppendUint16(out, uint16(r.key))
	out = binary.BigEndian.AppendUint16(out, uint16(r.version))
	out = appendInt32(out, l.serial)
	out = appendString(out, l.clientID)
	if r.flexible {
		out = append(out, 0) // no tagged fields
	}
	out = r.body(out)
	binary.BigEndian.PutUint32(out, uint32(len(out)-4))
	l.out = out

	err := l.within(ctx, r.wait+l.answer, func() error {
		if _, err := l.proto.Write(out); err != nil {
			return err
		}
		var head [8]byte
		if _, err := io.ReadFull(l.proto, head[:]); err != nil {
			return err
		}
		size := int(int32(binary.BigEndian.Uint32(head[:]))) - 4
		if serial := int32(binary.BigEndian.Uint32(head[4:])); serial != l.serial {
			return fmt.Errorf("answer to request %d, want %d", serial, l.serial)
		}
		if size < 0 || size > maxAnswer {
			return fmt.Errorf("answer of %d bytes, want at most %d", size, maxAnswer)
		}
		if cap(buf) < size {
			buf = make([]byte, size)
		}
		buf = buf[:size]
		_, err := io.ReadFull(l.proto, buf)
		return err
	})
	if err != nil {
		return buf, fmt.Errorf("broker %s: %v: %w", l.addr, r.key, err)
	}
	return buf, nil
}

// negotiate learns which versions the broker speaks.
func (l *link) negotiate(ctx context.Context) error {
	m, err := l.ask(ctx, &apiversions.Request{})
	if err != nil {
		return err
	}
	res := m.(*apiversions.Response)
	if res.ErrorCode != 0 {
		return fmt.Errorf("versions: %w", kafkago.Error(res.ErrorCode))
	}
	l.speaks = make(map[protocol.ApiKey]int16, len(res.ApiKeys))
	common := make(map[protocol.ApiKey]int16, len(res.ApiKeys))
	for _, k := range res.ApiKeys {
		key := protocol.ApiKey(k.ApiKey)
		l.speaks[key] = k.MaxVersion
		common[key] = key.SelectVersion(k.MinVersion, k.MaxVersion)
	}
	l.proto.SetVersions(common)
	if have := l.speaks[protocol.Fetch]; have < fetchVersion {
		return fmt.Errorf("%w: it speaks Fetch up to version %d, want %d (Kafka 2.1 or later)",
			kafkago.UnsupportedVersion, have, fetchVersion)
	}
	return nil
}

func (l *link) authenticate(ctx context.Context, mechanism sasl.Mechanism) error {
	m, err := l.ask(ctx, &saslhandshake.Request{Mechanism: mechanism.Name()})
	if err != nil {
		return err
	}
	if res := m.(*saslhandshake.Response); res.ErrorCode != 0 {
		return fmt.Errorf("sasl: %s refused, the broker offers %v: %w",
			mechanism.Name(), res.Mechanisms, kafkago.Error(res.ErrorCode))
	}
	exchange, say, err := mechanism.Start(ctx)
	if err != nil {
		return fmt.Errorf("sasl: %w", err)
	}
	for done := false; !done; {
		m, err := l.ask(ctx, &saslauthenticate.Request{AuthBytes: say})
		if errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF) {
			return fmt.Errorf("sasl: the broker hung up: %w", kafkago.SASLAuthenticationFailed)
		}
		if err != nil {
			return err
		}
		res := m.(*saslauthenticate.Response)
		if res.ErrorCode != 0 {
			return fmt.Errorf("sasl: %s: %w", res.ErrorMessage, kafkago.Error(res.ErrorCode))
		}
		if done, say, err = exchange.Next(ctx, res.AuthBytes); err != nil {
			return fmt.Errorf("sasl: %w", err)
		}
	}
	return nil
}

// refused tells a broker that will not have us, because of wrong settings, from one that cannot just now.
func refused(err error) bool {
	for _, code := range []kafkago.Error{
		kafkago.SASLAuthenticationFailed, kafkago.UnsupportedSASLMechanism, kafkago.IllegalSASLState,
		kafkago.ClusterAuthorizationFailed, kafkago.TopicAuthorizationFailed, kafkago.GroupAuthorizationFailed,
		kafkago.InvalidTopic, kafkago.UnsupportedVersion,
	} {
		if errors.Is(err, code) {
			return true
		}
	}
	var cert *tls.CertificateVerificationError
	var unknown x509.UnknownAuthorityError
	var host x509.HostnameError
	return errors.Is(err, errScram) || errors.As(err, &cert) || errors.As(err, &unknown) || errors.As(err, &host)
}
