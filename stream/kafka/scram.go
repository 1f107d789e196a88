package kafka

import (
	"bytes"
	"context"
	"crypto/hmac"
	"crypto/pbkdf2"
	"crypto/rand"
	"crypto/sha256"
	"crypto/sha512"
	"crypto/subtle"
	"encoding/base64"
	"errors"
	"fmt"
	"hash"
	"strconv"
	"strings"

	"github.com/segmentio/kafka-go/sasl"
)

var (
	sha256Hash = sha256.New
	sha512Hash = sha512.New
)

// errScram is wrapped by every fault in what a broker says during SCRAM: it is then not the broker it should be.
var errScram = errors.New("scram")

// scram is the exchange of RFC 5802, without channel binding, over the hash functions of RFC 7677 and Kafka.
// A password is used as its bytes of UTF-8, as Kafka itself stores it, without the preparation of RFC 4013.
type scram struct {
	name           string
	hash           func() hash.Hash
	user, password string
	nonce          string // "": a fresh one each time; set by tests only
}

func (s scram) Name() string { return s.name }

func (s scram) Start(context.Context) (sasl.StateMachine, []byte, error) {
	if s.nonce == "" {
		s.nonce = rand.Text()
	}
	user := strings.NewReplacer("=", "=3D", ",", "=2C").Replace(s.user)
	x := &scramExchange{scram: s, first: "n=" + user + ",r=" + s.nonce}
	return x, []byte("n,," + x.first), nil
}

// scramExchange is one authentication: it answers the salt with a proof, then checks the broker's own.
type scramExchange struct {
	scram
	first     string // the first message, without its header
	signature []byte // what the broker has to prove; nil before the proof was sent
}

func (x *scramExchange) Next(_ context.Context, challenge []byte) (done bool, response []byte, err error) {
	fields := map[string]string{}
	for part := range strings.SplitSeq(string(challenge), ",") {
		if key, value, ok := strings.Cut(part, "="); ok {
			fields[key] = value
		}
	}
	if e, ok := fields["e"]; ok {
		return false, nil, fmt.Errorf("%w: the broker refuses: %s", errScram, e)
	}
	if x.signature == nil {
		response, err = x.prove(string(challenge), fields)
		return false, response, err
	}
	proof, err := base64.StdEncoding.DecodeString(fields["v"])
	if err != nil || !hmac.Equal(proof, x.signature) {
		return false, nil, fmt.Errorf("%w: the broker does not know the password itself", errScram)
	}
	return true, nil, nil
}

// Bounds on what a broker may ask for. RFC 7677 wants at least 4096 rounds; more than a million would
// keep us computing for a broker that is up to no good.
const minRounds, maxRounds = 4096, 1_000_000

func (x *scramExchange) prove(challenge string, fields map[string]string) ([]byte, error) {
	nonce := fields["r"]
	if len(nonce) <= len(x.nonce) || !strings.HasPrefix(nonce, x.nonce) {
		return nil, fmt.Errorf("%w: the broker's nonce does not extend ours", errScram)
	}
	salt, err := base64.StdEncoding.DecodeString(fields["s"])
	if err != nil || len(salt) == 0 {
		return nil, fmt.Errorf("%w: the broker sent no salt", errScram)
	}
	rounds, err := strconv.Atoi(fields["i"])
	if err != nil || rounds < minRounds || rounds > maxRounds {
		return nil, fmt.Errorf("%w: the broker asks for %q rounds, want %d to %d", errScram, fields["i"], minRounds, maxRounds)
	}
	salted, err := pbkdf2.Key(x.hash, x.password, salt, rounds, x.hash().Size())
	if err != nil {
		return nil, fmt.Errorf("%w: %w", errScram, err)
	}
	final := "c=biws,r=" + nonce // biws: "n,,", no channel binding
	auth := x.first + "," + challenge + "," + final

	clientKey := x.mac(salted, "Client Key")
	digest := x.hash()
	digest.Write(clientKey)
	proof := bytes.Clone(clientKey)
	subtle.XORBytes(proof, clientKey, x.mac(digest.Sum(nil), auth))
	x.signature = x.mac(x.mac(salted, "Server Key"), auth)
	return []byte(final + ",p=" + base64.StdEncoding.EncodeToString(proof)), nil
}

func (x *scramExchange) mac(key []byte, text string) []byte {
	m := hmac.New(x.hash, key)
	m.Write([]byte(text))
	return m.Sum(nil)
}
