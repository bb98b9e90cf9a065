package main

import (
	"bufio"
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"io"
	"net/http"
	"os"
	"os/exec"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"saprolite/cmd/saprolite/engine"
	"saprolite/ingest/broker"
)

// asProgram makes the test binary the program itself.
const asProgram = "SAPROLITE_TEST_AS_PROGRAM"

func TestMain(m *testing.M) {
	if os.Getenv(asProgram) != "" {
		os.Exit(saprolite(context.Background(), os.Args[1:], os.Stdin, os.Stdout, os.Stderr))
	}
	os.Exit(m.Run())
}

// process is `saprolite run` in a process of its own.
type process struct {
	t       *testing.T
	cmd     *exec.Cmd
	started time.Time
	ended   chan error

	mu      sync.Mutex
	log     bytes.Buffer
	address string // of /metrics, /healthz and /readyz
}

// run starts the daemon in a process of its own.
func (h *home) run() *process {
	h.t.Helper()
	exe, err := os.Executable()
	if err != nil {
		h.t.Fatal(err)
	}
	p := &process{t: h.t, cmd: exec.Command(exe, "run", "--config", h.file), started: time.Now(), ended: make(chan error, 1)}
	p.cmd.Env = append(os.Environ(), asProgram+"=1")
	errs, err := p.cmd.StderrPipe()
	if err != nil {
		h.t.Fatal(err)
	}
	if err := p.cmd.Start(); err != nil {
		h.t.Fatal(err)
	}
	go func() {
		p.listen(errs)
		p.ended <- p.cmd.Wait()
		close(p.ended)
	}()
	h.t.Cleanup(func() { _ = p.cmd.Process.Kill(); <-p.ended })
	return p
}

// listen reads the log until the process ends.
func (p *process) listen(errs io.Reader) {
	for lines := bufio.NewScanner(errs); lines.Scan(); {
		var line struct{ Message, Address string }
		_ = json.Unmarshal(lines.Bytes(), &line) // the last line need not be of the log
		p.mu.Lock()
		fmt.Fprintln(&p.log, lines.Text())
		if line.Address != "" {
			p.address = line.Address
		}
		p.mu.Unlock()
	}
}

func (p *process) said() (log, address string) {
	p.mu.Lock()
	defer p.mu.Unlock()
	return p.log.String(), p.address
}

// get asks one of its pages; "" while it does not answer with 200.
func (p *process) get(path string) string {
	_, address := p.said()
	if address == "" {
		return ""
	}
	ctx, cancel := context.WithTimeout(p.t.Context(), patience)
	defer cancel()
	r, err := http.NewRequestWithContext(ctx, http.MethodGet, "http://"+address+path, nil)
	if err != nil {
		p.t.Fatal(err)
	}
	answer, err := http.DefaultClient.Do(r)
	if err != nil {
		return ""
	}
	defer answer.Body.Close()
	body, err := io.ReadAll(answer.Body)
	if err != nil || answer.StatusCode != http.StatusOK {
		return ""
	}
	return string(body)
}

// ready waits until the daemon says it is, and tells how long after its start.
func (p *process) ready() time.Duration {
	p.t.Helper()
	until(p.t, "readiness", func() bool {
		select {
		case err := <-p.ended:
			log, _ := p.said()
			p.t.Fatalf("the daemon ended: %v\n%s", err, log)
		default:
		}
		return p.get("/readyz") != ""
	})
	return time.Since(p.started)
}

// value is a number of /metrics; "" when there is none.
func (p *process) value(name string) string {
	_, after, _ := strings.Cut(p.get("/metrics"), "\n"+name+" ")
	value, _, _ := strings.Cut(after, "\n")
	return value
}

// tick lets time in and waits until everything before it has been worked on.
func (p *process) tick(feed *broker.Broker) {
	p.t.Helper()
	if _, err := feed.Publish(p.t.Context(), engine.TickSubject, nil, engine.EncodeTick(time.Now())); err != nil {
		p.t.Fatal(err)
	}
	until(p.t, "the loop to be at the end of the stream", func() bool {
		return p.value("saprolite_cursor_lag_messages") == "0"
	})
}

// terminate ends the daemon as systemd does, and wants it to end well.
func (p *process) terminate() {
	p.t.Helper()
	if err := p.cmd.Process.Signal(syscall.SIGTERM); err != nil {
		p.t.Fatal(err)
	}
	if err := hear(p.t, "the end after SIGTERM", p.ended); err != nil {
		log, _ := p.said()
		p.t.Fatalf("after SIGTERM: %v\n%s", err, log)
	}
}
