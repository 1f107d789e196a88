// Package checkpoint keeps named blobs, pages, on disk: all of them in one atomic
// unit, and only those that changed are written. It knows nothing of what they
// mean; each checkpoint also carries a small meta blob (positions and the like),
// written anew every time.
//
// # Files
//
// Checkpoint k is the file <k, 16 digits>.checkpoint. It holds the pages that
// changed since the checkpoint before, and a manifest that says where each live
// page lies, here or in an older file. A file is written under a temporary name,
// synced, renamed, and the directory synced; it never changes afterwards. Little
// endian; C is CRC-32 with the Castagnoli polynomial; manifest integers are those
// of package wire:
//
//	magic     [8]byte  "SWCHECK\n"
//	version   uint32   1
//	check     uint32   C of the 12 bytes above; these 16 bytes are the same in every version
//	pages              one after another, nothing between
//	manifest
//	  sequence   uint  k
//	  fallback   uint  the independent checkpoint that is kept (see below), or 0
//	  candidate  uint  the one that will take its place, or 0
//	  recent           count, then each: the checkpoints just before k that are kept, ascending
//	  written    uint  bytes written since the last rewriting began, but for those it moved and this manifest
//	  meta       bytes
//	  files            count, then each as the difference to the one before: files with live pages
//	  pages            count, then each, ascending by name:
//	    shared   uint    bytes its name shares with the name before, as many as possible
//	    rest     bytes   the rest of its name
//	    file     uint    index into files
//	    offset   uint    where it begins in that file
//	    stored   uint    its length there
//	    saved    uint    what compression saved: its true length is stored + saved
//	    check    uint    C of the stored bytes
//	length    uint64   of the manifest, in bytes
//	check     uint32   C of the manifest
//	check     uint32   C of the 12 bytes above
//
// A page is an S2 block where that is shorter, else it is stored as it is. On
// pages of unit rows (keys, times, counts, amounts of money) S2 halved the bytes at
// 0.9 GB/s, twice as fast as the disk took them; on pages of white noise it cost nothing.
//
// # What damage is survived
//
// The newest Keep checkpoints stay restorable, but they share the pages that did
// not change between them. So there is also a fallback: a checkpoint that shares
// no byte with the newest. To renew it the store now and then begins a rewriting:
// the newest checkpoint becomes the candidate, and the next commits, beside what
// changed, copy the live pages of its files forward, a bounded number of bytes
// each. When none is left behind, the candidate is the new fallback, and the files
// that only the old one needed are removed. A rewriting begins when half as many
// bytes were written as are live, when there is no fallback, and with every commit
// while all live pages fit into a MiB: each checkpoint of a small state stands alone.
//
//	damaged or missing                         restored
//	the newest file, whole or in part          the checkpoint before it
//	any other file, where the newest needs it  the newest checkpoint older than that file that is
//	                                           whole: at worst the fallback
//	all files but the fallback's               the fallback
//	bytes that no live page needs              the newest
//	a file of each of them                     none: Load fails and says what to do
//
// Until the rewriting after the first commit is over there is no fallback. The
// directory takes three to four times the live bytes, at worst five; for each byte
// that changes about three are written. A page that turns out to be damaged while
// the store is open makes Commit fail with a [LostError]; the caller still has it
// and sends it again.
package checkpoint

import (
	"errors"
	"fmt"

	"go.uber.org/zap"
)

const (
	// MaxPage is the largest length of a page in bytes. A page is read and written as
	// a whole; tens of kilobytes are a good size.
	MaxPage = 64 << 20
	// MaxName is the largest length of a page's name in bytes.
	MaxName = 1 << 10
)

var (
	// ErrLocked is wrapped by the error of Open when another process has the directory.
	ErrLocked = errors.New("state directory is in use")
	// ErrDamaged is wrapped by errors about stored bytes that are not what was written.
	ErrDamaged = errors.New("damaged")
	// ErrVersion is wrapped by errors about files of a newer format. They are not
	// skipped: to go on from an older checkpoint would throw away the newer one.
	ErrVersion = errors.New("written by a newer version of this program")
)

// A Page is a named blob. Its name is any string of 1 to MaxName bytes; the
// manifest lists every live page, in fewer bytes where many names begin alike.
type Page struct {
	Name string
	Data []byte
}

// A Snapshot is a checkpoint, restored.
type Snapshot struct {
	Sequence uint64 // of the checkpoint: 1 or more, larger is newer
	Meta     []byte
	Pages    map[string][]byte // the caller's own; delete what is decoded to free it early
	Skipped  []error           // newer checkpoints that are damaged, newest first
}

// Options are settings of a Store. The zero value is ready for use.
type Options struct {
	FS   FS          // nil: the directory itself, locked; others are not
	Log  *zap.Logger // nil: none
	Keep int         // newest checkpoints that stay restorable: 2 or more; 0: 2
}

func (o *Options) fill(dir string) error {
	if o.Keep == 0 {
		o.Keep = 2
	}
	if o.Keep < 2 {
		return fmt.Errorf("checkpoints to keep are %d: at least 2 are needed, so that a damaged one has one before it", o.Keep)
	}
	if o.FS == nil {
		o.FS = osFS{dir}
	}
	if o.Log == nil {
		o.Log = zap.NewNop()
	}
	return nil
}

// Stats are a Store's numbers.
type Stats struct {
	Sequence  uint64 // of the newest checkpoint, 0 if none
	Pages     int    // live
	LiveBytes int64  // of the live pages, as stored
	Files     int    // checkpoint files in the directory
	FileBytes int64  // their lengths together
	Written   int64  // bytes written by this Store, over all commits that succeeded
	Moved     int64  // those of them that were copied from older files
}

// LostError is the error of a Commit when stored pages turn out to be damaged. The
// checkpoints that hold them are lost, but the caller still has the pages: the next
// Commits fail in the same way until each of them has been changed or removed.
type LostError struct {
	Pages []string // sorted
	Err   error    // what is wrong with the first
}

func (e *LostError) Error() string {
	return fmt.Sprintf("%d stored pages can no longer be read and must be written again: the first is %q: %v", len(e.Pages), e.Pages[0], e.Err)
}

func (e *LostError) Unwrap() error { return e.Err }
