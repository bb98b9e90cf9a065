package broker

import (
	"fmt"
	"testing"

	"github.com/nats-io/nats.go"
	"github.com/synadia-io/orbit.go/jetstreamext"
)

func strict(b *testing.B) *Broker {
	return open(b, Options{Dir: b.TempDir(), MaxStore: 16 * gib})
}

func BenchmarkPublish1KB(b *testing.B) {
	k := strict(b)
	data := make([]byte, 1024)
	b.SetBytes(1024)
	for b.Loop() {
		if _, err := k.Publish(b.Context(), "obs.north.gauge", nil, data); err != nil {
			b.Fatal(err)
		}
	}
}

// The Loader next to the batch publisher it stands on, for the same bytes in
// the same run. One iteration is one batch of 1000 messages.
func BenchmarkLoad(b *testing.B) {
	for _, size := range []int{200, 1024, 8192} {
		data := make([]byte, size)
		b.Run(fmt.Sprintf("Loader/%dB", size), func(b *testing.B) {
			l, err := strict(b).Load(b.Context())
			if err != nil {
				b.Fatal(err)
			}
			b.SetBytes(int64(size) * batchMessages)
			for b.Loop() {
				for range batchMessages {
					if err := l.Add("obs.north.gauge", nil, data); err != nil {
						b.Fatal(err)
					}
				}
				if err := l.Flush(); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(b.N)*batchMessages/b.Elapsed().Seconds(), "msg/s")
		})
		b.Run(fmt.Sprintf("raw/%dB", size), func(b *testing.B) {
			k := strict(b)
			b.SetBytes(int64(size) * batchMessages)
			for b.Loop() {
				all := make([]*nats.Msg, batchMessages)
				for i := range all {
					all[i] = &nats.Msg{Subject: "obs.north.gauge", Header: nats.Header{}, Data: data}
				}
				if _, err := jetstreamext.PublishMsgBatch(b.Context(), k.js, all); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(b.N)*batchMessages/b.Elapsed().Seconds(), "msg/s")
		})
	}
}

// One iteration is one message of 1 KB, handed over.
func BenchmarkFollow1KB(b *testing.B) {
	k := strict(b)
	l, err := k.Load(b.Context())
	if err != nil {
		b.Fatal(err)
	}
	const n = 100_000
	for range n {
		if err := l.Add("obs.north.gauge", nil, make([]byte, 1024)); err != nil {
			b.Fatal(err)
		}
	}
	if err := l.Flush(); err != nil {
		b.Fatal(err)
	}
	b.SetBytes(1024)
	b.ReportAllocs()
	b.ResetTimer()
	for left := b.N; left > 0; {
		if err := k.Follow(b.Context(), Following{Stream: Observations, Each: func(m Msg) error {
			if left--; left == 0 || m.Seq == n {
				return errEnough
			}
			return nil
		}}); err != errEnough {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "msg/s")
}

// One iteration is one atomic batch of 1000 books of 30 KB.
func BenchmarkSave1000x30KB(b *testing.B) {
	k := books(b, strict(b))
	entries := make([]Entry, batchMessages)
	for i := range entries {
		entries[i] = Entry{Key: fmt.Sprintf("head.stand-%d", i), Data: make([]byte, 30_000), ExpectRev: rev(0)}
	}
	b.SetBytes(batchMessages * 30_000)
	for b.Loop() {
		revs, err := k.Save(b.Context(), entries)
		if err != nil {
			b.Fatal(err)
		}
		for i := range entries {
			entries[i].ExpectRev = rev(revs[i])
		}
	}
}

// One iteration lists 100,000 keys.
func BenchmarkKeys100k(b *testing.B) {
	k := books(b, strict(b))
	var entries []Entry
	for i := range 100_000 {
		entries = append(entries, Entry{Key: fmt.Sprintf("page.source-%d.2019", i), Data: make([]byte, 100)})
	}
	if _, err := k.Save(b.Context(), entries); err != nil {
		b.Fatal(err)
	}
	b.ResetTimer()
	for b.Loop() {
		if keys, err := k.Keys(b.Context(), "page"); err != nil || len(keys) != 100_000 {
			b.Fatal(len(keys), err)
		}
	}
}
