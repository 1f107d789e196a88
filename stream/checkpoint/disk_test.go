package checkpoint

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"maps"
	"math/rand/v2"
	"slices"
	"sync"
	"testing"
)

var errPower = errors.New("power failed")

// disk is a directory in memory that forgets what was not synced: contents beyond
// the last sync of a file, and names since the last sync of the directory.
type disk struct {
	mu      sync.Mutex
	now     map[string]*inode
	durable map[string]*inode
	temps   int
	ops     []string                       // kinds of the operations that change something, so far
	fault   func(kind string, n int) error // asked before the n-th of them, from 1; may be nil
	dead    bool                           // after errPower nothing works any more
}

type inode struct {
	data   []byte
	synced int
}

func newDisk() *disk { return &disk{now: map[string]*inode{}, durable: map[string]*inode{}} }

func (d *disk) step(kind string) error {
	if d.dead {
		return errPower
	}
	d.ops = append(d.ops, kind)
	if d.fault == nil {
		return nil
	}
	err := d.fault(kind, len(d.ops))
	d.dead = err == errPower
	return err
}

func (d *disk) List() ([]Entry, error) {
	d.mu.Lock()
	defer d.mu.Unlock()
	if d.dead {
		return nil, errPower
	}
	var all []Entry
	for name, n := range d.now {
		all = append(all, Entry{name, int64(len(n.data))})
	}
	return all, nil
}

func (d *disk) Open(name string) (File, int64, error) {
	d.mu.Lock()
	defer d.mu.Unlock()
	if d.dead {
		return nil, 0, errPower
	}
	n, ok := d.now[name]
	if !ok {
		return nil, 0, &fs.PathError{Op: "open", Path: name, Err: fs.ErrNotExist}
	}
	return memFile{bytes.NewReader(n.data)}, int64(len(n.data)), nil
}

type memFile struct{ io.ReaderAt }

func (memFile) Close() error { return nil }

func (d *disk) Create(name string) (Pending, error) {
	d.mu.Lock()
	defer d.mu.Unlock()
	if err := d.step("create"); err != nil {
		return nil, err
	}
	d.temps++
	p := &memPending{d: d, name: name, temp: fmt.Sprintf(".%s%d", name, d.temps), inode: &inode{}}
	d.now[p.temp] = p.inode
	return p, nil
}

func (d *disk) Remove(name string) error {
	d.mu.Lock()
	defer d.mu.Unlock()
	if err := d.step("remove"); err != nil {
		return err
	}
	if d.now[name] == nil {
		return fs.ErrNotExist
	}
	delete(d.now, name)
	return nil
}

func (d *disk) SyncDir() error {
	d.mu.Lock()
	defer d.mu.Unlock()
	if err := d.step("syncdir"); err != nil {
		return err
	}
	d.durable = maps.Clone(d.now)
	return nil
}

type memPending struct {
	d          *disk
	name, temp string
	*inode
	done bool
}

func (p *memPending) Write(b []byte) (int, error) {
	p.d.mu.Lock()
	defer p.d.mu.Unlock()
	if err := p.d.step("write"); err != nil {
		p.data = append(p.data, b[:len(b)/2]...)
		return len(b) / 2, err
	}
	p.data = append(p.data, b...)
	return len(b), nil
}

func (p *memPending) Replace() error {
	p.d.mu.Lock()
	defer p.d.mu.Unlock()
	if err := p.d.step("sync"); err != nil {
		p.synced = len(p.data) / 2
		return err
	}
	p.synced = len(p.data)
	if err := p.d.step("rename"); err != nil {
		return err
	}
	delete(p.d.now, p.temp)
	p.d.now[p.name] = p.inode
	p.done = true
	return nil
}

func (p *memPending) Discard() error {
	p.d.mu.Lock()
	defer p.d.mu.Unlock()
	if p.done {
		return nil
	}
	if err := p.d.step("discard"); err != nil {
		return err
	}
	delete(p.d.now, p.temp)
	return nil
}

// survival is what a power failure leaves of what was not synced.
type survival string

const (
	nothing    survival = "nothing"
	everything survival = "everything"
	anything   survival = "anything" // each name and each tail of a file by chance
)

// after is the disk that one finds when power is back.
func (d *disk) after(s survival, rng *rand.Rand) *disk {
	names := map[string]bool{}
	for name := range d.now {
		names[name] = true
	}
	for name := range d.durable {
		names[name] = true
	}
	next := newDisk()
	next.temps = d.temps
	for _, name := range slices.Sorted(maps.Keys(names)) {
		found := d.durable[name]
		if s == everything || s == anything && rng.IntN(2) == 0 {
			found = d.now[name]
		}
		if found == nil {
			continue
		}
		n := found.synced
		switch s {
		case everything:
			n = len(found.data)
		case anything:
			n += rng.IntN(len(found.data) - n + 1)
		}
		data := bytes.Clone(found.data[:n])
		if s == anything && n > found.synced && rng.IntN(2) == 0 {
			clear(data[found.synced:]) // the length was written, the contents were not
		}
		next.now[name] = &inode{data, n}
	}
	next.durable = maps.Clone(next.now)
	return next
}

// copy is the disk as it is, to be damaged.
func (d *disk) copy() *disk { return d.after(everything, nil) }

// without is a copy that lacks checkpoint k's file.
func (d *disk) without(k uint64) *disk {
	c := d.copy()
	delete(c.now, fileName(k))
	return c
}

// state is what a store should hold.
type state map[string]string

func (s state) with(changed []Page, removed []string) state {
	next := maps.Clone(s)
	for _, p := range changed {
		next[p.Name] = string(p.Data)
	}
	for _, name := range removed {
		delete(next, name)
	}
	return next
}

func (s state) equal(pages map[string][]byte) bool {
	return maps.EqualFunc(s, pages, func(a string, b []byte) bool { return a == string(b) })
}

// openSmall opens a store on d that writes often and rewrites early, as a large one would.
func openSmall(t interface{ Fatal(...any) }, d FS) *Store {
	s, err := Open("state", Options{FS: d})
	if err != nil {
		t.Fatal(err)
	}
	s.small, s.buffer = 300, 100
	return s
}

func look(t *testing.T, d FS) (*Snapshot, error) {
	t.Helper()
	s, err := OpenReadOnly("state", Options{FS: d})
	if err != nil {
		t.Fatal(err)
	}
	return s.Load()
}

// mustBe fails unless the newest intact checkpoint is k and holds want.
func mustBe(t *testing.T, d FS, k uint64, want state) {
	t.Helper()
	snap, err := look(t, d)
	if err != nil {
		t.Fatal(err)
	}
	if snap.Sequence != k || !want.equal(snap.Pages) {
		t.Fatalf("restored checkpoint %d with %d pages, right: %t; want %d with %d pages; skipped: %v",
			snap.Sequence, len(snap.Pages), want.equal(snap.Pages), k, len(want), snap.Skipped)
	}
}
