package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"sync"
	"time"

	"github.com/rs/zerolog"
	"github.com/spf13/cobra"

	"saprolite/alerts"
	"saprolite/cmd/saprolite/demo"
	"saprolite/cmd/saprolite/engine"
	"saprolite/ingest/broker"
	"saprolite/ingest/quantity"
	"saprolite/ingest/wire"
)

func newDemo() *cobra.Command {
	var fast bool
	var dir string
	c := &cobra.Command{
		Use:   "demo",
		Short: "Watch an invented forest live through a failed wet season",
		Long: `Starts the daemon with its broker inside on an invented forest of twelve stands
with fifteen years of invented history. Two more years then arrive the way real
data do, a day every fraction of a second; in the first of them the wet season
fails. You see what is told, and find each mail as a file, the webhook's posts,
and /metrics. Nothing leaves this machine.

When the two years are over the daemon stays up to be looked at, until Ctrl-C.`,
		Example: `  saprolite demo
  saprolite demo --fast              run through without pauses and end
  saprolite demo --dir corrow        keep everything in the folder corrow`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error {
			ctx := cmd.Context()
			if dir == "" {
				temp, err := os.MkdirTemp("", "saprolite-demo-")
				if err != nil {
					return err
				}
				dir = temp
			}
			if _, err := os.Stat(filepath.Join(dir, "data")); err == nil {
				return usage(cmd, fmt.Errorf("%s has the data of an earlier demo; name another folder, or delete it", dir))
			}
			err := runDemo(ctx, cmd.OutOrStdout(), dir, fast)
			if ctx.Err() != nil && (err == nil || errors.Is(err, context.Canceled)) {
				fmt.Fprintf(cmd.OutOrStdout(), "\nStopped. Everything is in %s; delete it when you like.\n", dir)
				return nil
			}
			return err
		},
	}
	c.Flags().BoolVar(&fast, "fast", false, "no pauses, and end after the two years")
	c.Flags().StringVar(&dir, "dir", "", "folder for the demo's files (default: a new one for temporary files)")
	return c
}

// A day of the demo takes this long to look at.
const demoDay = 80 * time.Millisecond

// showing is one run of the demo.
type showing struct {
	out    io.Writer
	dir    string
	fast   bool
	daemon *daemon
	feed   *broker.Broker // as a feed outside the daemon would use it
	island *demo.Island

	mails *demo.Mailbox
	posts *demo.Hook

	shownMails, shownPosts int // of what has come in, how many were named

	mu   sync.Mutex
	told []alerts.Message // since they were printed
}

func runDemo(ctx context.Context, out io.Writer, dir string, fast bool) (err error) {
	s := &showing{out: out, dir: dir, fast: fast, island: demo.NewIsland()}
	for _, folder := range []string{s.mailsDir(), s.postsDir()} {
		if err := os.MkdirAll(folder, 0o755); err != nil {
			return err
		}
	}
	if s.mails, err = demo.ReceiveMail(s.mailsDir()); err != nil {
		return err
	}
	defer s.mails.Close()
	if s.posts, err = demo.ReceiveWebhook(s.postsDir()); err != nil {
		return err
	}
	defer s.posts.Close()
	cfgFile := filepath.Join(dir, "saprolite.yaml")
	err = errors.Join(
		os.WriteFile(filepath.Join(dir, "stands.geojson"), demo.Forest, 0o644),
		os.WriteFile(cfgFile, demo.Settings(s.mails.Address(), s.posts.URL()), 0o644),
	)
	if err != nil {
		return err
	}
	logFile, err := os.Create(filepath.Join(dir, "saprolite.log"))
	if err != nil {
		return err
	}
	defer logFile.Close()
	cfg, reg, err := readBoth(cfgFile)
	if err != nil {
		return err
	}
	s.say(introduction, demo.Place, len(reg.Stands), dir)

	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	if s.daemon, err = openDaemon(ctx, cfg, reg, zerolog.New(logFile).With().Timestamp().Logger()); err != nil {
		return err
	}
	s.daemon.invented = true
	s.daemon.keeper.engine.Rehearse()
	s.daemon.onTold = s.note
	ended := make(chan error, 1)
	go func() { ended <- s.daemon.run(ctx) }()
	defer func() {
		cancel()
		err = errors.Join(err, <-ended)
	}()
	if s.feed, err = broker.Attach(ctx, cfg.Data); err != nil {
		return err
	}
	defer s.feed.Close(context.WithoutCancel(ctx))
	if err := s.history(ctx); err != nil {
		return err
	}
	if err := s.live(ctx); err != nil {
		return err
	}
	if err := s.end(ctx); err != nil {
		return err
	}
	if fast {
		return nil
	}
	s.say("\nThe daemon stays up to be looked at. Ctrl-C ends it.\n")
	<-ctx.Done()
	return ctx.Err()
}

const introduction = `This is %s: %d stands, three rain gauges, a mast and a flux tower.
The forest, its people and its weather are invented; nothing may be concluded from them.
The daemon, its broker and the way of the data are the real ones.
Files are in %s

`

func (s *showing) say(format string, args ...any) { fmt.Fprintf(s.out, format, args...) }

// note keeps what was told for printing; it is called in the daemon's loop.
func (s *showing) note(m alerts.Message) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.told = append(s.told, m)
}

func (s *showing) mailsDir() string { return filepath.Join(s.dir, "mails") }
func (s *showing) postsDir() string { return filepath.Join(s.dir, "posts") }

func (s *showing) taken() []alerts.Message {
	s.mu.Lock()
	defer s.mu.Unlock()
	told := s.told
	s.told = nil
	return told
}

// history loads fifteen years the way saprolite load does and lets them settle.
func (s *showing) history(ctx context.Context) error {
	file := filepath.Join(s.dir, "history.csv")
	rows, err := s.writeHistory(file)
	if err != nil {
		return err
	}
	s.say("Fifteen years of history, %s to %s: %d daily values in history.csv.\n", demo.FirstPast, demo.FirstLive-1, rows)
	began := time.Now()
	l := &loading{reg: s.daemon.reg, to: s.feed, errs: s.out, packs: map[string]*pack{}}
	if err := l.loadFiles(ctx, []string{file}, io.Discard); err != nil {
		return err
	}
	if err := s.tick(ctx, demo.FirstLive); err != nil {
		return err
	}
	s.say("Loaded and settled in %.1f s. What is known of the stores now:\n\n", time.Since(began).Seconds())
	s.stores()
	recorded := 0
	for _, m := range s.taken() {
		if !m.Told {
			recorded++
			continue
		}
		if err := sayMessage(s.out, m); err != nil {
			return err
		}
	}
	s.say("\nWhat those years would have raised is recorded (%d messages) and told to nobody.\n", recorded)
	s.say("Now two years arrive day by day, as SenML from the stations. The first is an\nordinary one; after it the wet season fails. A line a month, and what is told:\n\n")
	return nil
}

func (s *showing) writeHistory(name string) (rows int, err error) {
	file, err := create(name)
	if err != nil {
		return 0, err
	}
	defer file.discard()
	csv := wire.NewCSVWriter(file)
	for d := demo.FirstPast; d < demo.FirstLive; d++ {
		for _, source := range s.island.Next() {
			for _, o := range source.Observations {
				if err := csv.Write(o); err != nil {
					return rows, err
				}
				rows++
			}
		}
	}
	if err := csv.Flush(); err != nil {
		return rows, err
	}
	return rows, file.commit()
}

// stores prints how full each stand's store is and how that is known.
func (s *showing) stores() {
	for _, l := range s.daemon.watch.levels() {
		s.say("  %s\n", l)
	}
}

// live lets the two years arrive.
func (s *showing) live(ctx context.Context) error {
	month, rain := time.Month(0), 0.0
	for d := demo.FirstLive; d <= demo.LastLive; d++ {
		for _, day := range s.island.Next() {
			if err := s.publish(ctx, day); err != nil {
				return err
			}
			if day.Source == "gauge-valley" {
				rain += day.Observations[0].Value
			}
		}
		if err := s.tick(ctx, d+1); err != nil {
			return err
		}
		s.happenings(d)
		if err := s.sayTold(ctx); err != nil {
			return err
		}
		if _, now, _ := (d + 1).Date(); now != month {
			if month != 0 {
				s.say("%s\n", s.month(d, rain))
			}
			month, rain = now, 0
		}
		if !s.fast {
			select {
			case <-ctx.Done():
				return ctx.Err()
			case <-time.After(demoDay):
			}
		}
	}
	return nil
}

// sayTold prints what has been told, and where mails and posts of it lie.
func (s *showing) sayTold(ctx context.Context) error {
	told := s.taken()
	if len(told) == 0 {
		return nil
	}
	for _, m := range told {
		if err := sayMessage(s.out, m); err != nil {
			return err
		}
	}
	if err := s.daemon.watch.waitDelivered(ctx, 30*time.Second); err != nil {
		return err
	}
	if n, posts := s.mails.Kept(), s.posts.Kept(); n > s.shownMails {
		s.say("            -> mails/%s, posts/%s\n", numbers(s.shownMails, n, "eml"), numbers(s.shownPosts, posts, "json"))
		s.shownMails, s.shownPosts = n, posts
	}
	return nil
}

func numbers(from, to int, ending string) string {
	if to == from+1 {
		return fmt.Sprintf("%03d.%s", to, ending)
	}
	return fmt.Sprintf("%03d.%s to %03d.%s", from+1, ending, to, ending)
}

// happenings says what goes on beside the weather.
func (s *showing) happenings(d quantity.Day) {
	switch d {
	case demo.SilentFrom:
		s.say("%s  A fox bites through the line of gauge-high. Fennow Top has no other rain gauge.\n", d)
	case demo.SilentTo + 1:
		s.say("%s  The line is mended.\n", d)
	case demo.ReadOut:
		s.say("%s  The logger is read out: %d days of rain come in late, and the account is made right.\n", d, demo.SilentTo-demo.SilentFrom+1)
	}
}

// month is one line on the month that has ended.
func (s *showing) month(d quantity.Day, rain float64) string {
	year, m, _ := d.Date()
	return fmt.Sprintf("%d-%02d     valley rain %4.0f mm   %s", year, m, rain, s.daemon.watch.summary())
}

// publish sends one source's day as SenML to the broker, as a station would.
func (s *showing) publish(ctx context.Context, day demo.Day) error {
	data, err := wire.EncodeSenML(day.Observations)
	if err != nil {
		return err
	}
	_, err = s.feed.Publish(ctx, "obs.stations."+day.Source, map[string]string{engine.ContentType: engine.TypeSenML}, data)
	return err
}

// tick lets the morning of a day come and waits until the daemon has settled.
func (s *showing) tick(ctx context.Context, d quantity.Day) error {
	seq, err := s.feed.Publish(ctx, engine.TickSubject, nil, engine.EncodeTick(d.Start(demo.Offset).Add(6*time.Hour)))
	if err != nil {
		return err
	}
	return s.daemon.watch.waitFor(ctx, seq)
}

// end waits for the last messages to be delivered and says where to look.
func (s *showing) end(ctx context.Context) error {
	if err := s.daemon.watch.waitDelivered(ctx, 30*time.Second); err != nil {
		return err
	}
	s.say("\nTwo years are over. Where to look, all of it in %s:\n", s.dir)
	s.say("  mails      %d in mails/ (open one with a mail program)\n", s.mails.Kept())
	s.say("  webhook    %d posts in posts/\n", s.posts.Kept())
	if !s.fast {
		s.say("  metrics    http://%s/metrics\n", s.daemon.watch.address())
	}
	s.say("  a stand    saprolite show ashlar-ridge --config %s\n", filepath.Join(s.dir, "saprolite.yaml"))
	s.say("  the log    saprolite.log\n")
	return nil
}
