package broker

import (
	"context"
	"errors"
	"fmt"
	"regexp"
	"slices"
	"strconv"
	"strings"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
)

// Books keeps computed state by key: heads, pages, cursors, what a
// destination still has to send. It is a JetStream key-value bucket of
// history 1, so any NATS tool can read it, with atomic batches besides.
//
// A key is words of [a-z0-9_-] joined by dots, such as page.north-gauge.2019.
// A book holds at most 8 MiB. Each write of a book has a revision, which
// rises over all books.
type Books struct {
	b  *Broker
	kv jetstream.KeyValue
}

// Entry is a book to be saved.
type Entry struct {
	Key  string
	Data []byte
	// ExpectRev, if set, is the revision the book must still have: what Get or
	// the last Save said, 0 for a book that must not exist.
	ExpectRev *uint64
}

var keyPattern = regexp.MustCompile(`^[a-z0-9_-]+(\.[a-z0-9_-]+)*$`)

// Books opens the bucket. Codes: NotFound, Unreachable.
func (b *Broker) Books(ctx context.Context) (*Books, error) {
	kv, err := b.js.KeyValue(ctx, booksBucket)
	if errors.Is(err, jetstream.ErrBucketNotFound) {
		return nil, &Error{Code: NotFound, Op: "opening the books", Err: err}
	}
	if err != nil {
		return nil, b.wrap("opening the books", err)
	}
	return &Books{b: b, kv: kv}, nil
}

// Get reads a book and its revision; ok is false when there is none.
func (k *Books) Get(ctx context.Context, key string) (data []byte, rev uint64, ok bool, err error) {
	op := "reading book " + key
	if !keyPattern.MatchString(key) {
		return nil, 0, false, badKey(op, key)
	}
	e, err := k.kv.Get(ctx, key)
	if errors.Is(err, jetstream.ErrKeyNotFound) {
		return nil, 0, false, nil
	}
	if err != nil {
		return nil, 0, false, k.b.wrap(op, err)
	}
	return e.Value(), e.Revision(), true, nil
}

// Put writes a book whatever was there, and returns its revision.
func (k *Books) Put(ctx context.Context, key string, data []byte) (rev uint64, err error) {
	revs, err := k.Save(ctx, []Entry{{Key: key, Data: data}})
	if err != nil {
		return 0, err
	}
	return revs[0], nil
}

// Save writes books and returns their revisions, in the order of entries.
// Up to 1000 books of together 64 MiB are written all or none. More are
// written in several batches in the order given, each all or none, so the
// caller puts last what may be written only when all the rest is: its cursor.
// When a batch fails the earlier ones are kept; the revisions of what was
// written are returned with the error.
//
// Codes: Moved when a book has not its ExpectRev (nothing of that batch is
// written), Full, TooLarge, Invalid, and Unreachable, after which it is not
// known whether the batch was written: Get tells.
func (k *Books) Save(ctx context.Context, entries []Entry) (revs []uint64, err error) {
	const op = "saving books"
	all := make([]*nats.Msg, len(entries))
	seen := make(map[string]bool, len(entries))
	for i, e := range entries {
		if !keyPattern.MatchString(e.Key) {
			return nil, badKey(op, e.Key)
		}
		if seen[e.Key] {
			return nil, invalid(op, "book %s is given twice", e.Key)
		}
		seen[e.Key] = true
		m := &nats.Msg{Subject: booksSubject + e.Key, Data: e.Data, Header: make(nats.Header, 4)}
		if e.ExpectRev != nil {
			m.Header[jetstream.ExpectedLastSubjSeqHeader] = []string{strconv.FormatUint(*e.ExpectRev, 10)}
		}
		if m.Size()+headerRoom > maxBook {
			return nil, &Error{Code: TooLarge, Op: op, Err: fmt.Errorf("book %s has %d bytes, a book may have %d", e.Key, len(e.Data), maxBook-headerRoom-64-len(m.Subject))}
		}
		all[i] = m
	}
	for len(all) > 0 {
		n, size := 0, 0
		for n < len(all) && n < batchMessages {
			size += all[n].Size() + headerRoom
			if size > booksBytes {
				break
			}
			n++
		}
		last, err := k.b.atomically(ctx, all[:n])
		if err != nil {
			err = k.b.wrap(op, err)
			if errors.Is(err, ErrMoved) {
				err = k.whoMoved(ctx, entries[len(revs):len(revs)+n], err)
			}
			return revs, err
		}
		for i := range n {
			revs = append(revs, last-uint64(n-1-i))
		}
		all = all[n:]
	}
	return revs, nil
}

// whoMoved names the first book that is not at its expected revision; the
// server's refusal does not.
func (k *Books) whoMoved(ctx context.Context, entries []Entry, cause error) error {
	for _, e := range entries {
		if e.ExpectRev == nil {
			continue
		}
		_, rev, _, err := k.Get(ctx, e.Key)
		if err != nil {
			return cause
		}
		if rev != *e.ExpectRev {
			return &Error{Code: Moved, Op: "saving books",
				Err: fmt.Errorf("book %s has revision %d, expected %d: %w", e.Key, rev, *e.ExpectRev, errors.Unwrap(cause))}
		}
	}
	return cause
}

// Keys returns, in order, the keys below prefix (page.north-gauge finds
// page.north-gauge.2019 and not page.north-gauge itself), or all keys when
// prefix is empty. It reads the server's index, not the books.
func (k *Books) Keys(ctx context.Context, prefix string) ([]string, error) {
	op := "listing books"
	subject, err := below(op, prefix)
	if err != nil {
		return nil, err
	}
	s, err := k.b.stream(ctx, BooksStream)
	if err != nil {
		return nil, k.b.wrap(op, err)
	}
	info, err := s.Info(ctx, jetstream.WithSubjectFilter(subject))
	if err != nil {
		return nil, k.b.wrap(op, err)
	}
	keys := make([]string, 0, len(info.State.Subjects))
	for subject := range info.State.Subjects {
		keys = append(keys, strings.TrimPrefix(subject, booksSubject))
	}
	slices.Sort(keys)
	return keys, nil
}

// All calls each for every book below prefix (as Keys), oldest write first.
// A book that is written meanwhile may come twice. An error of each ends All,
// which returns it. A broker that is away is waited for until ctx ends.
func (k *Books) All(ctx context.Context, prefix string, each func(key string, data []byte, rev uint64) error) error {
	subject, err := below("reading all books", prefix)
	if err != nil {
		return err
	}
	return k.b.read(ctx, &reading{
		Following: Following{
			Stream: BooksStream, Subjects: []string{subject},
			Each: func(m Msg) error {
				if m.Header.Get("KV-Operation") != "" { // a deletion by some other tool
					return nil
				}
				return each(strings.TrimPrefix(m.Subject, booksSubject), m.Data, m.Seq)
			},
		},
		next: 1, sparse: true,
	})
}

func below(op, prefix string) (subject string, err error) {
	if prefix == "" {
		return booksSubject + ">", nil
	}
	if !keyPattern.MatchString(prefix) {
		return "", badKey(op, prefix)
	}
	return booksSubject + prefix + ".>", nil
}

func badKey(op, key string) error {
	return invalid(op, "key %q: expected words of a-z 0-9 _ - joined by dots", key)
}
