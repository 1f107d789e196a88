package decode

import (
	"math/bits"
	"strings"
)

// A node is an object that wanted paths lead into, with the keys that matter
// there. The keys lie in a hash table with at most a quarter of its places taken.
type node struct {
	table []key
	shift uint // of a hash to its place in the table
	below []int
	keys  []key // while it is built
}

// A key is one wanted key of an object. It may be both a field and the way to others.
type key struct {
	name    string
	word    uint64 // its first eight bytes
	used    bool
	numeric bool
	flat    bool // a whole dotted path as one key of the outermost object
	slot    int  // of the field; -1 if it is none
	node    int  // of the object under the key; 0 if nothing in it is wanted
}

const rootNode = 1 // node 0 is an object of which nothing is wanted

// buildNodes makes the tree of wanted keys; a node is named by its index.
func buildNodes(fields []Field) []node {
	nodes := make([]node, 2)
	add := func(n int, name string) *key {
		for i := range nodes[n].keys {
			if k := &nodes[n].keys[i]; k.name == name {
				return k
			}
		}
		nodes[n].keys = append(nodes[n].keys, key{name: name, used: true, slot: -1})
		return &nodes[n].keys[len(nodes[n].keys)-1]
	}
	for slot, f := range fields {
		at, path := rootNode, f.Path
		for {
			name, rest, more := strings.Cut(path, ".")
			k := add(at, name)
			if !more {
				k.slot, k.numeric = slot, f.Numeric
				break
			}
			if k.node == 0 {
				k.node = len(nodes)
				nodes = append(nodes, node{})
			}
			at, path = k.node, rest
			nodes[at].below = append(nodes[at].below, slot)
		}
		if at != rootNode {
			nodes[rootNode].keys = append(nodes[rootNode].keys,
				key{name: f.Path, used: true, slot: slot, numeric: f.Numeric, flat: true})
		}
	}
	for i := range nodes {
		nodes[i].build()
	}
	return nodes
}

// build fills the table from the keys.
func (n *node) build() {
	size := 1 << bits.Len(uint(4*len(n.keys)))
	n.shift = 64 - uint(bits.TrailingZeros(uint(size)))
	n.table = make([]key, size)
	for _, k := range n.keys {
		s := []byte(k.name)
		k.word = firstWord(s, 0, len(s))
		at := n.place(s, 0, len(s), k.word)
		for n.table[at].used {
			at = (at + 1) & (size - 1)
		}
		n.table[at] = k
	}
	n.keys = nil
}

// find returns the key that is s[p:q], or nil.
func (n *node) find(s []byte, p, q int) *key {
	word := firstWord(s, p, q)
	at := n.place(s, p, q, word)
	for {
		k := &n.table[at&(len(n.table)-1)]
		if !k.used {
			return nil
		}
		if k.word == word && len(k.name) == q-p && (q-p <= 8 || k.name == string(s[p:q])) {
			return k
		}
		at++
	}
}

// place hashes length and both ends of a key, which is enough to spread names.
func (n *node) place(s []byte, p, q int, word uint64) int {
	if q-p > 8 {
		word ^= bits.RotateLeft64(load8(s, q-8), 29)
	}
	return int((word + uint64(q-p)) * 0x9e3779b97f4a7c15 >> n.shift)
}

// firstWord is the first eight bytes of s[p:q], little end first, filled up with zeros.
func firstWord(s []byte, p, q int) uint64 {
	if p+8 <= len(s) {
		word := load8(s, p)
		if q-p < 8 {
			word &= 1<<(8*(q-p)) - 1
		}
		return word
	}
	var word uint64
	for i := p; i < q; i++ {
		word |= uint64(s[i]) << (8 * (i - p))
	}
	return word
}
