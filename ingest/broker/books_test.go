package broker

import (
	"fmt"
	"slices"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

func books(t testing.TB, b *Broker) *Books {
	t.Helper()
	k, err := b.Books(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	return k
}

func rev(r uint64) *uint64 { return &r }

func TestBooksGetPutKeysAll(t *testing.T) {
	b := open(t, small(t))
	k := books(t, b)
	if _, _, ok, err := k.Get(t.Context(), "head.oak-1"); ok || err != nil {
		t.Errorf("missing book: %v %v", ok, err)
	}
	if keys, err := k.Keys(t.Context(), ""); err != nil || len(keys) != 0 {
		t.Errorf("keys of no books: %v %v", keys, err)
	}
	if err := k.All(t.Context(), "", func(string, []byte, uint64) error { return fmt.Errorf("called") }); err != nil {
		t.Errorf("all of no books: %v", err)
	}
	for _, key := range []string{"page.b.2019", "page.a.2020", "page.a.2019", "page.a", "page.ab.2019", "head.a"} {
		if _, err := k.Put(t.Context(), key, []byte(key+" old")); err != nil {
			t.Fatal(err)
		}
	}
	last, err := k.Put(t.Context(), "page.a.2020", []byte("new"))
	if err != nil {
		t.Fatal(err)
	}
	data, r, ok, err := k.Get(t.Context(), "page.a.2020")
	if err != nil || !ok || r != last || string(data) != "new" {
		t.Errorf("%q %d %v %v", data, r, ok, err)
	}
	keys, err := k.Keys(t.Context(), "page.a")
	if want := []string{"page.a.2019", "page.a.2020"}; err != nil || !slices.Equal(keys, want) {
		t.Errorf("keys %v (%v), want %v", keys, err, want)
	}
	if keys, err = k.Keys(t.Context(), ""); err != nil || len(keys) != 6 || !slices.IsSorted(keys) {
		t.Errorf("all keys %v (%v)", keys, err)
	}
	got := map[string]string{}
	if err := k.All(t.Context(), "page.a", func(key string, data []byte, r uint64) error {
		if got[key] = string(data); key == "page.a.2020" && r != last {
			t.Errorf("revision %d, want %d", r, last)
		}
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	if len(got) != 2 || got["page.a.2019"] != "page.a.2019 old" || got["page.a.2020"] != "new" {
		t.Errorf("all: %v", got)
	}
	if err := k.All(t.Context(), "", func(string, []byte, uint64) error { return errEnough }); err != errEnough {
		t.Errorf("error of the receiver: %v", err)
	}
}

func TestBooksRefuseBadKeys(t *testing.T) {
	k := books(t, open(t, small(t)))
	for _, key := range []string{"", ".", "a.", ".a", "a..b", "A", "a b", "a.*", "a.>", "a/b", "a\r\n", "ö"} {
		_, _, _, err := k.Get(t.Context(), key)
		isCode(t, err, Invalid)
		_, err = k.Put(t.Context(), key, nil)
		isCode(t, err, Invalid)
		if key != "" {
			_, err = k.Keys(t.Context(), key)
			isCode(t, err, Invalid)
		}
	}
	_, err := k.Save(t.Context(), []Entry{{Key: "a"}, {Key: "a"}})
	isCode(t, err, Invalid)
	_, err = k.Put(t.Context(), "a", make([]byte, maxBook))
	isCode(t, err, TooLarge)
	if _, err := k.Put(t.Context(), "a", make([]byte, maxBook-1000)); err != nil {
		t.Errorf("a book just below 8 MiB: %v", err)
	}
	if data, _, ok, err := k.Get(t.Context(), "a"); err != nil || !ok || len(data) != maxBook-1000 {
		t.Errorf("read %d bytes, %v %v", len(data), ok, err)
	}
	if revs, err := k.Save(t.Context(), nil); err != nil || len(revs) != 0 {
		t.Errorf("saving nothing: %v %v", revs, err)
	}
}

func TestSaveIsAllOrNone(t *testing.T) {
	b := open(t, small(t))
	k := books(t, b)
	revs, err := k.Save(t.Context(), []Entry{{Key: "head.a", Data: []byte("1"), ExpectRev: rev(0)}, {Key: "cursor", Data: []byte("1"), ExpectRev: rev(0)}})
	if err != nil {
		t.Fatal(err)
	}
	for i, key := range []string{"head.a", "cursor"} {
		if _, r, _, err := k.Get(t.Context(), key); err != nil || r != revs[i] {
			t.Errorf("%s has revision %d, Save said %d (%v)", key, r, revs[i], err)
		}
	}
	// Another writer.
	if _, err := k.Put(t.Context(), "cursor", []byte("other")); err != nil {
		t.Fatal(err)
	}
	before, err := b.State(t.Context(), BooksStream)
	if err != nil {
		t.Fatal(err)
	}
	_, err = k.Save(t.Context(), []Entry{
		{Key: "head.a", Data: []byte("2"), ExpectRev: rev(revs[0])},
		{Key: "head.b", Data: []byte("2")},
		{Key: "cursor", Data: []byte("2"), ExpectRev: rev(revs[1])},
	})
	if e := isCode(t, err, Moved); !strings.Contains(e.Error(), "book cursor has revision") {
		t.Errorf("%v does not name the book", e)
	}
	if after, err := b.State(t.Context(), BooksStream); err != nil || after != before {
		t.Errorf("a refused save left %+v, before %+v (%v)", after, before, err)
	}
	// A book that must not exist but does.
	_, err = k.Save(t.Context(), []Entry{{Key: "head.a", ExpectRev: rev(0)}})
	isCode(t, err, Moved)
}

func TestSaveOfMoreThanABatchKeepsTheCursorLast(t *testing.T) {
	b := open(t, small(t))
	k := books(t, b)
	const n = 2*batchMessages + 5
	entries := make([]Entry, n)
	for i := range entries {
		entries[i] = Entry{Key: fmt.Sprintf("page.%d", i), Data: []byte{byte(i)}, ExpectRev: rev(0)}
	}
	entries[n-1].Key = "cursor"
	revs, err := k.Save(t.Context(), entries)
	if err != nil {
		t.Fatal(err)
	}
	if len(revs) != n || !slices.IsSorted(revs) || revs[n-1] != uint64(n) {
		t.Errorf("%d revisions up to %d", len(revs), revs[len(revs)-1])
	}
	if keys, err := k.Keys(t.Context(), "page"); err != nil || len(keys) != n-1 {
		t.Errorf("%d keys (%v)", len(keys), err)
	}
	// The cursor's batch is refused: pages before it are kept, the cursor is not moved.
	for i := range entries {
		entries[i].ExpectRev = rev(revs[i])
		entries[i].Data = []byte("second")
	}
	entries[n-1].ExpectRev = rev(1)
	kept, err := k.Save(t.Context(), entries)
	isCode(t, err, Moved)
	if len(kept) != 2*batchMessages {
		t.Errorf("%d written before the refusal, want %d", len(kept), 2*batchMessages)
	}
	if data, _, _, err := k.Get(t.Context(), "cursor"); err != nil || string(data) == "second" {
		t.Errorf("the cursor was moved: %q %v", data, err)
	}
	if data, r, _, err := k.Get(t.Context(), "page.0"); err != nil || string(data) != "second" || r != kept[0] {
		t.Errorf("page.0: %q %d %v", data, r, err)
	}
}

func TestSaveKeepsWithinTheBytesOfABatch(t *testing.T) {
	o := small(t)
	o.MaxStore = gib
	k := books(t, open(t, o))
	entries := make([]Entry, 12) // 84 MB: two batches
	for i := range entries {
		entries[i] = Entry{Key: fmt.Sprintf("page.%d", i), Data: make([]byte, 7*mib)}
	}
	revs, err := k.Save(t.Context(), entries)
	if err != nil {
		t.Fatal(err)
	}
	if len(revs) != 12 || revs[11] != 12 {
		t.Errorf("revisions %v", revs)
	}
}

// Whatever is saved, by whatever way, the books are those of a plain map.
func TestBooksAreAMap(t *testing.T) {
	b := open(t, small(t))
	k := books(t, b)
	type held struct {
		data string
		rev  uint64
	}
	model := map[string]held{}
	key := rapid.SampledFrom([]string{"a", "a.b", "a.c", "b.a", "b_-.0", "c"})
	rapid.Check(t, func(t *rapid.T) {
		var entries []Entry
		fits := true
		for _, key := range rapid.SliceOfNDistinct(key, 1, 5, rapid.ID[string]).Draw(t, "keys") {
			e := Entry{Key: key, Data: []byte(rapid.String().Draw(t, "data"))}
			switch rapid.IntRange(0, 5).Draw(t, "expect") {
			case 0, 1, 2:
				e.ExpectRev = rev(model[key].rev)
			case 3:
				e.ExpectRev = rev(model[key].rev + 1)
				fits = false
			}
			entries = append(entries, e)
		}
		revs, err := k.Save(t.Context(), entries)
		switch {
		case fits && err != nil:
			t.Fatal(err)
		case fits:
			for i, e := range entries {
				model[e.Key] = held{string(e.Data), revs[i]}
			}
		case !fits && err == nil:
			t.Fatal("a stale save was accepted")
		}
		got := map[string]held{}
		if err := k.All(t.Context(), "", func(key string, data []byte, rev uint64) error {
			got[key] = held{string(data), rev}
			return nil
		}); err != nil {
			t.Fatal(err)
		}
		if len(got) != len(model) {
			t.Fatalf("books %v, want %v", got, model)
		}
		for key, want := range model {
			data, r, ok, err := k.Get(t.Context(), key)
			if one := (held{string(data), r}); err != nil || !ok || one != want || got[key] != want {
				t.Fatalf("%s: get %v, all %v, want %v (%v)", key, one, got[key], want, err)
			}
		}
	})
}
