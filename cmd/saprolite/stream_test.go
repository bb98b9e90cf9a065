package main

import (
	"context"
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/rs/zerolog"

	"saprolite/alerts"
	"saprolite/config"
	"saprolite/ingest/broker"
	"saprolite/ingest/quantity"
)

// The stream of observations is lost, replaced, or an older copy of it put
// back: what comes then is taken in, the account goes on as if nothing had
// been, nothing is told twice, and the operator is told once.
func TestStreamIsNotTheOneRead(t *testing.T) {
	const days = 500
	first := quantity.DateOf(2031, time.March, 1)
	push := func(t *testing.T, h *home, prepare func(*daemon), from, to quantity.Day) *notes {
		log := &notes{}
		cfg, reg, err := readBoth(h.file)
		if err != nil {
			t.Fatal(err)
		}
		d, err := openDaemon(context.Background(), cfg, reg, zerolog.New(log))
		if err != nil {
			t.Fatal(err)
		}
		d.invented = true
		if prepare != nil {
			prepare(d)
		}
		end, _ := begin(t, d)
		feed := attach(t, d)
		for day := from; day < to; day++ {
			publish(t, feed, "obs.station.ridge", weather("ridge", day))
			tick(t, d, feed, day.End(ridgeOffset).Add(closingHour))
		}
		if err := end(); err != nil {
			t.Fatalf("ended with %v", err)
		}
		return log
	}
	stream := func(h *home) string {
		return filepath.Join(filepath.Dir(h.file), config.DefaultData, "jetstream", "jetstream", "$G", "streams", broker.Observations)
	}

	never := oneStand(t, "")
	push(t, never, nil, first, first+days)
	wantDaily, wantTold := never.daily(), ids(never.told())
	if len(wantTold) < 4 {
		t.Fatalf("the weather gives only %d messages; this test needs some before and after", len(wantTold))
	}

	for name, c := range map[string]struct {
		early, stopped func(t *testing.T, h *home)   // at day 100, at day 250
		opened         func(t *testing.T, d *daemon) // at day 250, before the loop
		says           string
	}{
		"lost": {
			stopped: func(t *testing.T, h *home) {
				if err := errors.Join(errorIfMissing(stream(h)), os.RemoveAll(stream(h))); err != nil {
					t.Fatal(err)
				}
			},
			says: "is not the stream that the books were made from",
		},
		"an older copy": {
			early: func(t *testing.T, h *home) {
				if err := os.CopyFS(filepath.Join(filepath.Dir(h.file), "copy"), os.DirFS(stream(h))); err != nil {
					t.Fatal(err)
				}
			},
			stopped: func(t *testing.T, h *home) {
				if err := errors.Join(os.RemoveAll(stream(h)), os.Rename(filepath.Join(filepath.Dir(h.file), "copy"), stream(h))); err != nil {
					t.Fatal(err)
				}
			},
			says: "an older copy of it was put back",
		},
		"replaced in the running daemon": {
			opened: func(t *testing.T, d *daemon) {
				js := raw(t, d)
				s, err := js.Stream(t.Context(), broker.Observations)
				if err != nil {
					t.Fatal(err)
				}
				if err := js.DeleteStream(t.Context(), broker.Observations); err != nil {
					t.Fatal(err)
				}
				if _, err := js.CreateStream(t.Context(), s.CachedInfo().Config); err != nil {
					t.Fatal(err)
				}
			},
			says: "is not the stream that the books were made from",
		},
	} {
		t.Run(name, func(t *testing.T) {
			h := oneStand(t, "")
			if log := push(t, h, nil, first, first+100); log.count("again from its beginning") > 0 {
				t.Errorf("a first start says: %s", log.text.String())
			}
			if c.early != nil {
				c.early(t, h)
			}
			push(t, h, nil, first+100, first+250)
			if c.stopped != nil {
				c.stopped(t, h)
			}
			log := push(t, h, func(d *daemon) {
				if c.opened != nil {
					c.opened(t, d)
				}
			}, first+250, first+400)
			if log.count(c.says) != 1 || log.count("again from its beginning") != 1 || log.count(`"level":"error"`) != 1 {
				t.Errorf("the operator should be told once that OBSERVATIONS %s:\n%s", c.says, log.text.String())
			}
			if log := push(t, h, nil, first+400, first+days); log.count("again from its beginning") > 0 {
				t.Errorf("the next start says it again: %s", log.text.String())
			}
			if got := h.daily(); got != wantDaily {
				t.Errorf("the daily files differ: %s", firstDifference(wantDaily, got))
			}
			if diff := cmp.Diff(wantTold, ids(h.told())); diff != "" {
				t.Errorf("what was told differs (- want, + got):\n%s", diff)
			}
		})
	}
}

func errorIfMissing(path string) error {
	_, err := os.Stat(path)
	return err
}

// A stream that is deleted under the loop ends the daemon with the code that
// starts it again, and the new start sets the stream up.
func TestStreamDeletedUnderTheLoop(t *testing.T) {
	h := oneStand(t, "")
	d := h.opened(func(d *daemon) { d.invented = true })
	end, ended := begin(t, d)
	feed := attach(t, d)
	day := quantity.DateOf(2031, time.May, 1)
	tick(t, d, feed, day.End(ridgeOffset))
	if err := raw(t, d).DeleteStream(t.Context(), broker.Observations); err != nil {
		t.Fatal(err)
	}
	hear(t, "the end", ended)
	if code := exitCode(end(), &strings.Builder{}); code != exitTemporary {
		t.Fatalf("exit %d: %v", code, end())
	}
	h.live(func(d *daemon, feed *broker.Broker) {
		publish(t, feed, "obs.station.ridge", weather("ridge", day))
		tick(t, d, feed, day.End(ridgeOffset).Add(closingHour))
	})
	if got := h.daily(); !strings.Contains(got, "ridge,2031-05-01,") {
		t.Errorf("the day that came after is not there:\n%s", got)
	}
}

// What has not been read yet makes no room, however full the stream is: a
// cursor before the stream's beginning is that of books that start anew.
func TestTidyLeavesWhatIsUnread(t *testing.T) {
	h := oneStand(t, "")
	d := h.opened(nil)
	defer d.close()
	day := quantity.DateOf(2031, time.May, 1)
	for range 10 {
		publish(t, d.broker, "obs.station.ridge", weather("ridge", day))
	}
	filled(t, d)
	if err := d.keeper.tidy(t.Context()); err != nil {
		t.Fatal(err)
	}
	if state, err := d.broker.State(t.Context(), broker.Observations); err != nil || state.Messages != 10 {
		t.Fatalf("%d of 10 unread messages are left, error %v", state.Messages, err)
	}
	if err := takeUpTo(t.Context(), d.keeper, 10, func() {}); err != nil {
		t.Fatal(err)
	}
	if err := d.keeper.save(t.Context()); err != nil {
		t.Fatal(err)
	}
	if state, err := d.broker.State(t.Context(), broker.Observations); err != nil || state.Messages >= 10 || state.Messages == 0 {
		t.Errorf("%d messages are left of 10 that are in the books of a full stream, error %v", state.Messages, err)
	}
}

// everTold is stream ALERTS.
func everTold(t *testing.T, b *broker.Broker) []alerts.Message {
	t.Helper()
	state, err := b.State(t.Context(), broker.Alerts)
	if err != nil {
		t.Fatal(err)
	}
	var all []alerts.Message
	if state.Last == 0 {
		return nil
	}
	done := errors.New("done")
	err = b.Follow(t.Context(), broker.Following{Stream: broker.Alerts, Each: func(m broker.Msg) error {
		var a alerts.Message
		if err := json.Unmarshal(m.Data, &a); err != nil {
			return err
		}
		all = append(all, a)
		if m.Seq == state.Last {
			return done
		}
		return nil
	}})
	if !errors.Is(err, done) {
		t.Fatal(err)
	}
	return all
}

// told is everTold of a home nobody lives in.
func (h *home) told() []alerts.Message {
	h.t.Helper()
	d := h.opened(nil)
	all := everTold(h.t, d.broker)
	if err := d.close(); err != nil {
		h.t.Fatal(err)
	}
	return all
}

func ids(list []alerts.Message) (all []string) {
	for _, m := range list {
		all = append(all, m.MessageID()+" "+string(m.MsgType))
	}
	return all
}
