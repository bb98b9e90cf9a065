package webhook

import (
	"context"
	"encoding/json"
	"errors"
	"io"
	"math"
	"net/http"
	"net/http/httptest"
	"net/netip"
	"strings"
	"sync/atomic"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"saprolite/alerts"
	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

// The secret, id, time, body and signature are those of the Standard Webhooks
// reference (libraries/go/webhook_test.go, TestWebhookSign).
const (
	vectorSecret    = "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw"
	vectorID        = "msg_p5jXN8AQM9LWM0D4loKWxJek"
	vectorTime      = 1614265330
	vectorBody      = `{"test": 2432232314}`
	vectorSignature = "v1,g0hM9SsE+OTPJTGt/tmIKtSyZlE3uFJELVlNIOLJ1OE="
)

func TestSignature(t *testing.T) {
	key, err := decodeSecret(vectorSecret)
	if err != nil {
		t.Fatal(err)
	}
	if got := sign(key, vectorID, time.Unix(vectorTime, 0), []byte(vectorBody)); got != vectorSignature {
		t.Errorf("signature %s, want %s", got, vectorSignature)
	}
}

func message() alerts.Message {
	nan := alerts.Number(math.NaN())
	return alerts.Message{
		ID: "sap-abcdefghijklmnopqrstuvwxyz", Revision: 2, MsgType: alerts.Update, Status: alerts.Actual,
		Sent: time.Date(2031, 8, 15, 6, 0, 0, 0, time.UTC), Told: true,
		Stand: "upper-beck", StandName: "Upper Beck <north> & Höhe", Groups: []string{"north"}, Hectares: 12.4,
		Kind: finding.StoreLow, Level: finding.Low, Onset: 22493, Day: 22505, Ended: quantity.NoDay,
		Evidence:  []alerts.Evidence{{Name: "storage deficit", Value: 110, Low: nan, High: nan, Unit: "mm", Source: "water account"}},
		Threshold: alerts.Threshold{Value: 107, Unit: "mm", Basis: "low"}, Caution: alerts.Caution,
	}
}

// CloudEvents spec.md: id, source, specversion and type are required and not
// empty; attribute names are a-z and 0-9, at most 20 of them; time is RFC 3339.
func TestEvent(t *testing.T) {
	body, err := Event(message(), "/saprolite/hollin-forest")
	if err != nil {
		t.Fatal(err)
	}
	var got map[string]json.RawMessage
	if err := json.Unmarshal(body, &got); err != nil {
		t.Fatal(err)
	}
	for name, want := range map[string]string{
		"specversion": `"1.0"`, "id": `"sap-abcdefghijklmnopqrstuvwxyz-0002"`, "source": `"/saprolite/hollin-forest"`,
		"type": `"saprolite.alert.store-low"`, "subject": `"upper-beck"`, "time": `"2031-08-15T06:00:00Z"`,
		"sequence": `"0002"`, "datacontenttype": `"application/json"`,
	} {
		if string(got[name]) != want {
			t.Errorf("%s is %s, want %s", name, got[name], want)
		}
	}
	for name := range got {
		if len(name) > 20 || strings.Trim(name, "abcdefghijklmnopqrstuvwxyz0123456789") != "" {
			t.Errorf("attribute name %q", name)
		}
	}
	var data alerts.Message
	if err := json.Unmarshal(got["data"], &data); err != nil {
		t.Fatal(err)
	}
	sameNumbers := cmp.Comparer(func(a, b alerts.Number) bool { return a == b || !a.Known() && !b.Known() })
	if d := cmp.Diff(message(), data, sameNumbers); d != "" {
		t.Errorf("data (-want +got):\n%s", d)
	}
	if !strings.Contains(string(body), "<north> & Höhe") || !strings.Contains(string(got["data"]), `"low":null`) {
		t.Errorf("body %s", body)
	}
	for _, m := range []alerts.Message{{Revision: 1, Kind: "x"}, {ID: "a", Kind: "x"}, {ID: "a", Revision: 1}} {
		if _, err := Event(m, "/s"); err == nil {
			t.Errorf("no error for id %q, revision %d, kind %q", m.ID, m.Revision, m.Kind)
		}
	}
}

func post(t *testing.T, o Options, m alerts.Message) error {
	t.Helper()
	if o.Source == "" {
		o.Name, o.Source = "office", "/saprolite/hollin-forest"
	}
	d, err := New(o)
	if err != nil {
		t.Fatal(err)
	}
	return d.Deliver(context.Background(), m)
}

func TestDeliver(t *testing.T) {
	now := time.Unix(vectorTime, 0)
	var bodies, ids []string
	s := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		body, err := io.ReadAll(r.Body)
		if err != nil {
			t.Error(err)
		}
		key, err := decodeSecret(vectorSecret)
		if err != nil {
			t.Error(err)
		}
		id := r.Header.Get("webhook-id")
		for name, want := range map[string]string{
			"Content-Type": "application/cloudevents+json; charset=utf-8", "webhook-timestamp": "1614265330",
			"webhook-signature": sign(key, id, now, body), "User-Agent": "saprolite",
		} {
			if got := r.Header.Get(name); got != want {
				t.Errorf("%s: %q, want %q", name, got, want)
			}
		}
		if r.Method != http.MethodPost || r.URL.Path != "/hook" {
			t.Errorf("%s %s", r.Method, r.URL)
		}
		bodies, ids = append(bodies, string(body)), append(ids, id)
		w.WriteHeader(http.StatusAccepted)
	}))
	defer s.Close()
	o := Options{URL: s.URL + "/hook", Secret: vectorSecret, Now: func() time.Time { return now }}
	for range 2 {
		if err := post(t, o, message()); err != nil {
			t.Fatal(err)
		}
	}
	if bodies[0] != bodies[1] || ids[0] != ids[1] || ids[0] != message().MessageID() {
		t.Errorf("a retry differs: ids %v", ids)
	}
}

// Without a secret the message is still named and dated, by headers a receiver
// can tell copies by; only the signature is left out.
func TestWithoutSecretNothingIsSigned(t *testing.T) {
	hits := 0
	s := httptest.NewServer(http.HandlerFunc(func(_ http.ResponseWriter, r *http.Request) {
		hits++
		for name, want := range map[string]string{
			"webhook-id": message().MessageID(), "webhook-timestamp": "1614265330", "webhook-signature": "",
		} {
			if got := r.Header.Get(name); got != want {
				t.Errorf("%s: %q, want %q", name, got, want)
			}
		}
	}))
	defer s.Close()
	if err := post(t, Options{URL: s.URL, Now: func() time.Time { return time.Unix(vectorTime, 0) }}, message()); err != nil || hits != 1 {
		t.Fatalf("%d posts, %v", hits, err)
	}
}

func TestAnswers(t *testing.T) {
	now := time.Date(2031, 8, 15, 6, 0, 0, 0, time.UTC)
	for _, c := range []struct {
		code      int
		after     string
		permanent bool
		wait      time.Duration
	}{
		{code: 301, permanent: true}, {code: 302, permanent: true}, {code: 307, permanent: true}, {code: 308, permanent: true},
		{code: 400, permanent: true}, {code: 401, permanent: true}, {code: 404, permanent: true}, {code: 410, permanent: true}, {code: 422, permanent: true},
		{code: 408}, {code: 425}, {code: 429}, {code: 500}, {code: 502}, {code: 503}, {code: 504},
		{code: 429, after: "120", wait: 2 * time.Minute},
		{code: 503, after: "Fri, 15 Aug 2031 07:30:00 GMT", wait: 90 * time.Minute},
		{code: 503, after: "Fri, 15 Aug 2031 05:00:00 GMT"}, // past
		{code: 503, after: "soon"}, {code: 503, after: "-5"}, {code: 503, after: "99999999999999999999"},
		{code: 410, after: "5", permanent: true},
	} {
		hits := 0
		s := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
			hits++
			if c.after != "" {
				w.Header().Set("Retry-After", c.after)
			}
			w.Header().Set("Location", "/elsewhere")
			w.WriteHeader(c.code)
			io.WriteString(w, "sorry "+strings.Repeat("x", 1000))
		}))
		err := post(t, Options{URL: s.URL, Now: func() time.Time { return now }}, message())
		s.Close()
		u, ok := errors.AsType[*alerts.Undeliverable](err)
		if !ok {
			t.Errorf("%d: got %v", c.code, err)
			continue
		}
		if u.Permanent != c.permanent || u.Unknown || u.RetryAfter != c.wait {
			t.Errorf("%d, Retry-After %q: %+v; want permanent %v, wait %v", c.code, c.after, u, c.permanent, c.wait)
		}
		if hits != 1 { // reliability.md section 2, case 14: redirect target hits = 0
			t.Errorf("%d: %d requests, want 1", c.code, hits)
		}
		if n := len(err.Error()); n > 400 || !strings.Contains(err.Error(), "sorry") {
			t.Errorf("%d: error of %d bytes: %v", c.code, n, err)
		}
	}
}

func TestBrokenConnectionIsTemporary(t *testing.T) {
	s := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) { panic(http.ErrAbortHandler) }))
	addr := s.URL
	for range 2 { // first cut, then refused
		err := post(t, Options{URL: addr + "/t0ken"}, message())
		u, ok := errors.AsType[*alerts.Undeliverable](err)
		if !ok || u.Permanent || u.Unknown {
			t.Errorf("got %v, want a temporary failure", err)
		}
		if strings.Contains(err.Error(), "t0ken") {
			t.Errorf("the error shows the path: %v", err)
		}
		s.Close()
	}
}

func TestDeliverEndsWithItsContext(t *testing.T) {
	ctx, cancel := context.WithCancel(context.Background())
	release := make(chan struct{})
	s := httptest.NewServer(http.HandlerFunc(func(http.ResponseWriter, *http.Request) { cancel(); <-release }))
	defer s.Close()
	defer close(release)
	d, err := New(Options{Name: "office", URL: s.URL, Source: "/s"})
	if err != nil {
		t.Fatal(err)
	}
	if err := d.Deliver(ctx, message()); !errors.Is(err, context.Canceled) {
		t.Errorf("got %v, want %v", err, context.Canceled)
	}
}

func TestTooLargeIsNotSent(t *testing.T) {
	var hits atomic.Int32
	s := httptest.NewServer(http.HandlerFunc(func(http.ResponseWriter, *http.Request) { hits.Add(1) }))
	defer s.Close()
	m := message()
	m.Reason = strings.Repeat("x", 20_000)
	if u, ok := errors.AsType[*alerts.Undeliverable](post(t, Options{URL: s.URL}, m)); !ok || !u.Permanent || hits.Load() != 0 {
		t.Errorf("got %v, %d requests", u, hits.Load())
	}
}

// reliability.md section 2, case 29: internal connects = 0.
func TestPrivateAddressesAreRefused(t *testing.T) {
	intranet := []netip.Prefix{netip.MustParsePrefix("10.1.0.0/16")}
	for address, want := range map[string]bool{
		"93.184.216.34:443": true, "[2606:2800:220:1::1]:443": true, "10.1.2.3:443": true, "[::ffff:10.1.2.3]:443": true,
		"127.0.0.1:443": false, "[::1]:443": false, "[::ffff:127.0.0.1]:443": false, "0.0.0.0:443": false, "[::]:443": false,
		"10.2.0.1:443": false, "192.168.1.1:443": false, "172.16.0.1:443": false, "169.254.169.254:80": false,
		"[fe80::1%eth0]:443": false, "[fd00::1]:443": false, "100.64.0.1:443": false, "224.0.0.1:443": false,
		"[64:ff9b::7f00:1]:443": false, "[2002:7f00:1::]:443": false, "255.255.255.255:443": false, "nonsense": false,
	} {
		if err := checkAddress(address, false, intranet); (err == nil) != want {
			t.Errorf("%s: %v", address, err)
		}
	}
	// The error sends the operator to allow_private only where that helps.
	for address, hint := range map[string]bool{
		"10.2.0.1:443": true, "192.168.1.1:443": true, "100.64.0.1:443": true, "[fd00::1]:443": true,
		"127.0.0.1:443": false, "169.254.169.254:80": false, "0.0.0.0:443": false, "[64:ff9b::7f00:1]:443": false,
	} {
		err := checkAddress(address, false, nil)
		if err == nil || strings.Contains(err.Error(), "allow_private") != hint {
			t.Errorf("%s: %v; want the hint: %v", address, err, hint)
			continue
		}
		ip := netip.MustParseAddrPort(address).Addr()
		_, err = New(Options{Name: "office", URL: "https://hooks.hollin.example/a", Source: "/s", AllowPrivate: []netip.Prefix{netip.PrefixFrom(ip, ip.BitLen())}})
		if (err == nil) != hint {
			t.Errorf("allow_private: %s: %v", ip, err)
		}
	}
	if err := checkAddress("10.1.2.3:80", true, intranet); err == nil {
		t.Error("localhost that resolves to another machine is dialled")
	}

	// The same, through a whole request: a public-looking https name on loopback.
	var hits atomic.Int32
	s := httptest.NewTLSServer(http.HandlerFunc(func(http.ResponseWriter, *http.Request) { hits.Add(1) }))
	defer s.Close()
	port := s.URL[strings.LastIndexByte(s.URL, ':'):]
	for _, host := range []string{"[::ffff:7f00:1]", "2130706433", "0x7f.1", "0.0.0.0", "localhost."} {
		err := post(t, Options{URL: "https://" + host + port, Transport: func(tr *http.Transport) {
			tr.TLSClientConfig = s.Client().Transport.(*http.Transport).TLSClientConfig.Clone()
			tr.TLSClientConfig.ServerName = "example.com"
		}}, message())
		if host == "[::ffff:7f00:1]" { // this one names the machine by number
			if err != nil {
				t.Errorf("%s: %v", host, err)
			}
			continue
		}
		if err == nil {
			t.Errorf("%s was reached", host)
		}
	}
	if hits.Load() != 1 {
		t.Errorf("%d requests arrived, want the one that names this machine by number", hits.Load())
	}
}

func TestNewRefuses(t *testing.T) {
	good := Options{Name: "office", URL: "https://hooks.hollin.example/a", Source: "/saprolite/hollin-forest"}
	if _, err := New(good); err != nil {
		t.Fatal(err)
	}
	for name, change := range map[string]func(*Options){
		"no url":         func(o *Options) { o.URL = "" },
		"scheme":         func(o *Options) { o.URL = "ftp://hooks.hollin.example/" },
		"plain http":     func(o *Options) { o.URL = "http://hooks.hollin.example/" },
		"http to LAN":    func(o *Options) { o.URL = "http://10.1.2.3/" },
		"password":       func(o *Options) { o.URL = "https://a:b@hooks.hollin.example/" },
		"no source":      func(o *Options) { o.Source = "" },
		"bad source":     func(o *Options) { o.Source = "/saprolite/hollin forest" },
		"secret plain":   func(o *Options) { o.Secret = "open sesame" },
		"secret base64":  func(o *Options) { o.Secret = "whsec_*" },
		"secret short":   func(o *Options) { o.Secret = "whsec_AAAA" },
		"secret too big": func(o *Options) { o.Secret = "whsec_" + strings.Repeat("AAAA", 22) },
		"empty secret":   func(o *Options) { o.Secret = "whsec_" },
		"all networks":   func(o *Options) { o.AllowPrivate = []netip.Prefix{netip.MustParsePrefix("0.0.0.0/0")} },
		"public network": func(o *Options) { o.AllowPrivate = []netip.Prefix{netip.MustParsePrefix("93.184.216.0/24")} },
		"no network":     func(o *Options) { o.AllowPrivate = []netip.Prefix{{}} },
	} {
		o := good
		change(&o)
		if _, err := New(o); err == nil {
			t.Errorf("%s: no error", name)
		} else if o.Secret != "" && strings.Contains(err.Error(), o.Secret[6:]) && len(o.Secret) > 6 {
			t.Errorf("%s: the error shows the secret: %v", name, err)
		}
	}
}
