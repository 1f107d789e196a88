package kafka

import (
	"encoding/binary"
	"hash/crc32"
)

// Layout of a message of the formats before Kafka 0.11 (magic 0, without a timestamp, and 1), in bytes from
// its start. Such messages still lie in topics that are older than that and keep everything.
const (
	atOldCRC   = 12
	atOldAttrs = 17
	atOldBody  = 18 // magic 0; 8 bytes of timestamp lie before it in magic 1
)

// legacy decodes the message at data[i:stop], with the messages packed inside it if it is compressed.
func (d *decoder) legacy(offset int64, i, stop int) error {
	m, err := d.oldMessage(i, stop)
	if err != nil {
		return err
	}
	if m.codec == 0 {
		d.add(offset, m.start, m.end, m.stamps.of(0))
		return nil
	}
	if offset < d.next {
		return nil
	}
	at, stop, err := d.unpack(m.codec, m.start, m.end)
	if err != nil {
		return err
	}
	// In format 1 the wrapper has the offset of the last message inside, and those count from the first.
	shift := int64(0)
	if m.magic == 1 {
		last := int64(0)
		for j := at; stop-j >= prefix; {
			last = d.int64(j)
			size := d.int32(j + atLength)
			if size < 0 || size > stop-j-prefix {
				return errRecord
			}
			j += prefix + size
		}
		shift = offset - last
	}
	for stop-at >= prefix {
		inner, size := d.int64(at), d.int32(at+atLength)
		if size < 0 || size > stop-at-prefix {
			return errRecord
		}
		in, err := d.oldMessage(at, at+prefix+size)
		if err != nil {
			return err
		}
		if in.codec != 0 {
			return errRecord // no broker packs twice
		}
		if m.stamps.fixed {
			in.stamps = m.stamps
		}
		if o := inner + shift; o <= offset {
			d.add(o, in.start, in.end, in.stamps.of(0))
		}
		at += prefix + size
	}
	return nil
}

// oldMessage is one message of an old format: its value is data[start:end].
type oldMessage struct {
	magic, codec int
	stamps       stamps
	start, end   int
}

func (d *decoder) oldMessage(i, stop int) (m oldMessage, err error) {
	if stop-i < atOldBody {
		return m, errRecord
	}
	if crc32.ChecksumIEEE(d.data[i+atMagic:stop]) != binary.BigEndian.Uint32(d.data[i+atOldCRC:]) {
		return m, errChecksum
	}
	m.magic = int(d.data[i+atMagic])
	attributes := d.data[i+atOldAttrs]
	m.codec = int(attributes & codecBits)
	c := cursor{b: d.data[:stop], i: i + atOldBody}
	m.stamps.base = -1
	if m.magic == 1 {
		m.stamps = stamps{base: c.int64(), fixed: attributes&appendTimeBit != 0}
	}
	c.take(max(int(c.int32()), 0)) // key
	size := max(int(c.int32()), 0)
	m.start, m.end = c.i, c.i+size
	if c.take(size); c.short || m.magic > 1 {
		return m, errRecord
	}
	return m, nil
}
