package mail

import (
	"bytes"
	"flag"
	"io"
	"math"
	"mime"
	"mime/multipart"
	"mime/quotedprintable"
	"net/mail"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"saprolite/alerts"
	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

var update = flag.Bool("update", false, "write testdata anew from what Compose gives")

func options() Options {
	return Options{Name: "ranger-office", Server: "127.0.0.1:2525", TLS: NoTLS, From: "saprolite@hollin.example",
		To: []string{"forester@hollin.example", "warden@hollin.example"}, Place: "Hollin Forest"}
}

func day(t testing.TB, s string) quantity.Day {
	t.Helper()
	d, err := quantity.ParseDay(s)
	if err != nil {
		t.Fatal(err)
	}
	return d
}

// upperBeck is an invented stand in an invented forest.
func upperBeck(t testing.TB) alerts.Message {
	nan := alerts.Number(math.NaN())
	onset := day(t, "2031-08-02")
	return alerts.Message{
		ID: alerts.EpisodeID("Hollin Forest", "upper-beck", finding.StoreLow, onset), Revision: 3,
		MsgType: alerts.Update, Status: alerts.Actual, Sent: time.Date(2031, 8, 15, 6, 0, 0, 0, time.UTC), Told: true,
		Stand: "upper-beck", StandName: "Upper Beck", Groups: []string{"north"}, Hectares: 12.4,
		Kind: finding.StoreLow, Level: finding.NearlySpent,
		Severity: "Severe", Urgency: "Expected", Certainty: "Possible",
		Day: day(t, "2031-08-14"), Onset: onset, Ended: quantity.NoDay,
		Headline: "Store nearly spent: 131 mm used of the 143 mm it can give, 8 % left.",
		Reason:   "At this level since 2031-08-14, in this dry spell since 2031-08-02. This level was not reached in most of the 17 complete years known.",
		Evidence: []alerts.Evidence{
			{Name: "storage deficit", Value: 131.2, Low: 118.4, High: 144.9, Unit: "mm", Source: "water account, measured evapotranspiration"},
			{Name: "storage limit", Value: 143, Low: nan, High: nan, Unit: "mm", Source: "configured"},
			{Name: "share of store left", Value: 0.0825, Low: nan, High: nan, Unit: "1", Source: "1 - deficit / limit"},
			{Name: "predawn water potential", Value: nan, Low: nan, High: nan, Unit: "MPa", Source: ""},
		},
		Threshold:  alerts.Threshold{Value: 128.7, Unit: "mm", Basis: "nearly spent: less than 10 % of the store left; limit configured"},
		FieldCheck: "Look at the crowns from a safe place: wilting or rolled leaves, early leaf fall, thin tops.",
		Caution:    alerts.Caution,
		EndsWhen:   "Ends when more than about 50 % of the store has been back for 5 days.",
	}
}

// end is the end of upperBeck: its evidence is the account of the day it ended.
func end(t testing.TB) alerts.Message {
	m := upperBeck(t)
	m.Revision, m.MsgType, m.EndedWhy, m.Urgency = 4, alerts.Cancel, alerts.Over, "Past"
	m.Ended = day(t, "2031-10-09")
	m.Day, m.Sent = m.Ended, time.Date(2031, 10, 10, 6, 0, 0, 0, time.UTC)
	m.Headline = "Over since 2031-10-09: enough has come back to the store (at its worst: nearly spent)."
	m.Reason = "It lasted from 2031-08-02 to 2031-10-08."
	m.Evidence[0].Value, m.Evidence[0].Low, m.Evidence[0].High = 61.4, 48.2, 75
	m.Evidence[2].Value = 0.571
	m.EndsWhen = "It has ended."
	m.FieldCheck = "What a dry spell does can show late: dead tops, thin crowns, bark beetles in the next season."
	return m
}

func write(t testing.TB, m alerts.Message, o Options) []byte {
	t.Helper()
	msg, err := Compose(m, o)
	if err != nil {
		t.Fatal(err)
	}
	var b bytes.Buffer
	if _, err := msg.WriteTo(&b); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

// open reads a mail with the standard library: header, text part, HTML part.
func open(t testing.TB, raw []byte) (h mail.Header, text, html string) {
	t.Helper()
	m, err := mail.ReadMessage(bytes.NewReader(raw))
	if err != nil {
		t.Fatal(err)
	}
	typ, params, err := mime.ParseMediaType(m.Header.Get("Content-Type"))
	if err != nil || typ != "multipart/alternative" {
		t.Fatalf("content type %q: %v", m.Header.Get("Content-Type"), err)
	}
	parts := multipart.NewReader(m.Body, params["boundary"])
	for _, want := range []string{"text/plain", "text/html"} {
		p, err := parts.NextRawPart()
		if err != nil {
			t.Fatal(err)
		}
		if got := p.Header.Get("Content-Type"); !strings.HasPrefix(got, want+"; charset=UTF-8") {
			t.Fatalf("part %q, want %s", got, want)
		}
		body, err := io.ReadAll(quotedprintable.NewReader(p))
		if err != nil {
			t.Fatal(err)
		}
		if want == "text/plain" {
			text = string(body)
		} else {
			html = string(body)
		}
	}
	if _, err := parts.NextRawPart(); err != io.EOF {
		t.Fatalf("more than two parts (%v)", err)
	}
	return m.Header, text, html
}

// The files are for looking at in a mail program; what must be in them is
// stated by the other tests.
func TestGolden(t *testing.T) {
	ended := end(t)
	corrected := end(t)
	corrected.EndedWhy, corrected.Late, corrected.Corrects = alerts.Corrected, true, upperBeck(t).MessageID()
	corrected.Headline = "Corrected: the account with the data that have come since does not show this (was: nearly spent)."
	corrected.Reason = "Late or revised data changed the account of the days before 2031-10-09. What was told before is withdrawn."
	exercise := upperBeck(t)
	exercise.Status, exercise.Revision, exercise.MsgType = alerts.Exercise, 1, alerts.Alert
	exercise.Late = true
	for name, m := range map[string]alerts.Message{"update": upperBeck(t), "ended": ended, "corrected": corrected, "exercise": exercise} {
		t.Run(name, func(t *testing.T) {
			got := write(t, m, options())
			file := filepath.Join("testdata", name+".eml")
			if *update {
				if err := os.WriteFile(file, got, 0o644); err != nil {
					t.Fatal(err)
				}
				return
			}
			want, err := os.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			if d := cmp.Diff(string(want), string(got)); d != "" {
				t.Errorf("%s (-want +got); if this is meant, run go test -update and look at the file:\n%s", file, d)
			}
		})
	}
}

func TestHeaders(t *testing.T) {
	m := upperBeck(t)
	h, _, _ := open(t, write(t, m, options()))
	id := func(r string) string { return "<" + m.ID + "-" + r + "@hollin.example>" }
	for key, want := range map[string]string{
		"Subject":        "[Hollin Forest] Upper Beck: stored water",
		"Date":           "Fri, 15 Aug 2031 06:00:00 +0000",
		"Message-ID":     id("0003"),
		"In-Reply-To":    id("0002"),
		"References":     id("0001") + " " + id("0002"),
		"Auto-Submitted": "auto-generated",
		"List-Id":        "saprolite alerts <ranger-office.alerts.hollin.example>",
		"From":           `"saprolite Hollin Forest" <saprolite@hollin.example>`,
		"To":             "<forester@hollin.example>, <warden@hollin.example>",
		"User-Agent":     "",
		"X-Mailer":       "",
	} {
		if got := h.Get(key); got != want {
			t.Errorf("%s: %q, want %q", key, got, want)
		}
	}
}

func TestThread(t *testing.T) {
	m := upperBeck(t)
	subjects := map[string]bool{}
	for rev, wantRefs := range map[int][]string{
		1:  nil,
		2:  {"0001"},
		3:  {"0001", "0002"},
		25: {"0001", "0016", "0017", "0018", "0019", "0020", "0021", "0022", "0023", "0024"},
	} {
		m.Revision = rev
		m.Level = []finding.Level{finding.DrawingDown, finding.Low, finding.Spent}[rev%3]
		if rev == 25 {
			m.MsgType, m.Ended = alerts.Cancel, m.Day
		}
		h, _, _ := open(t, write(t, m, options()))
		subjects[h.Get("Subject")] = true
		var refs []string
		for f := range strings.FieldsSeq(h.Get("References")) {
			refs = append(refs, strings.TrimPrefix(strings.TrimSuffix(f, "@hollin.example>"), "<"+m.ID+"-"))
		}
		if d := cmp.Diff(wantRefs, refs); d != "" {
			t.Errorf("revision %d (-want +got):\n%s", rev, d)
		}
	}
	if len(subjects) != 1 {
		t.Errorf("one episode has the subjects %v", subjects)
	}
}

func TestFirstTwoLinesSayWhatWhereSinceWhenAndHowSure(t *testing.T) {
	_, text, html := open(t, write(t, upperBeck(t), options()))
	lines := strings.Split(text, "\r\n")
	want := []string{
		"Store nearly spent: 131 mm used of the 143 mm it can give, 8 % left.",
		"Upper Beck, 12.4 ha, Hollin Forest. Since 2031-08-02, as of 2031-08-14. How sure: one source only.",
	}
	if d := cmp.Diff(want, lines[:2]); d != "" {
		t.Errorf("text (-want +got):\n%s", d)
	}
	body := html[strings.Index(html, "<body"):]
	seen := strings.Fields(regexp.MustCompile(`<[^>]*>`).ReplaceAllString(body, " "))
	if got := strings.Join(seen, " "); !strings.HasPrefix(got, strings.Join(want, " ")) {
		t.Errorf("HTML begins %.200q", got)
	}
}

func TestBothPartsSayEverything(t *testing.T) {
	_, text, html := open(t, write(t, upperBeck(t), options()))
	html = strings.ReplaceAll(html, "&nbsp;", " ")
	for _, want := range []string{
		"This level was not reached in most of the 17 complete years known.",
		"storage deficit", "131 mm", "118 to 145 mm", "water account, measured evapotranspiration",
		"share of store left", "0.083", "1 - deficit / limit",
		"predawn water potential", "unknown", "source unknown",
		"129 mm", "less than 10 % of the store left",
		"rolled leaves", "has been back for 5 days", alerts.Caution, "-0003, sent 2031-08-15T06:00:00Z",
	} {
		for part, s := range map[string]string{"text": text, "HTML": html} {
			if !strings.Contains(s, want) {
				t.Errorf("%s does not say %q", part, want)
			}
		}
	}
	for _, cap := range []string{"Severe", "Expected", "Possible", "NaN"} {
		if strings.Contains(text, cap) || strings.Contains(html, cap) {
			t.Errorf("%q is not a word of the mail", cap)
		}
	}
}

// Nothing is fetched when the mail is opened, and nothing runs.
func TestHTMLAsksForNothing(t *testing.T) {
	m := upperBeck(t)
	m.Reason = `see http://tracker.example <img src="http://tracker.example/p.gif"><script>alert(1)</script>`
	_, _, html := open(t, write(t, m, options()))
	if got := regexp.MustCompile(`(?i)<(img|script|link|iframe|object|a|form|style|svg)\b|\b(src|href|background|action|on\w+)\s*=|url\(|@import`).FindAllString(
		strings.ReplaceAll(html, "&lt;img src=&#34;", ""), -1); len(got) > 0 {
		t.Errorf("the HTML part contains %q", got)
	}
	if w := regexp.MustCompile(`[^-]width:\s*(\d+)px`).FindAllStringSubmatch(html, -1); len(w) > 0 {
		t.Errorf("fixed widths %v do not fit 320 px", w)
	}
}

func TestExerciseAndEndAreMarked(t *testing.T) {
	m := upperBeck(t)
	m.Status = alerts.Exercise
	h, text, html := open(t, write(t, m, options()))
	if got := h.Get("Subject"); got != "EXERCISE [Hollin Forest] Upper Beck: stored water" {
		t.Errorf("subject %q", got)
	}
	if !strings.HasPrefix(text, "EXERCISE. This is a rehearsal, not a warning.\r\n") || !strings.Contains(html, "EXERCISE. This is a rehearsal") {
		t.Error("an exercise does not say so at the top of both parts")
	}
	m = end(t)
	_, text, html = open(t, write(t, m, options()))
	if !strings.Contains(text, "Began on 2031-08-02, ended on 2031-10-09.") {
		t.Errorf("an end does not say from when to when:\n%s", text)
	}
	for part, s := range map[string]string{"text": text, "HTML": html} {
		for _, past := range []string{"What ends it", "hreshold", "129 mm", "nearly spent: less than", "Evidence"} {
			if strings.Contains(s, past) {
				t.Errorf("the %s of an end says %q, which is past", part, past)
			}
		}
		if !strings.Contains(s, "The account now") || !strings.Contains(s, "61.4 mm") {
			t.Errorf("the %s of an end does not show the account now", part)
		}
	}
	m.EndedWhy = alerts.Corrected
	_, corrected, _ := open(t, write(t, m, options()))
	if !strings.Contains(corrected, "The account now") || strings.Contains(corrected, "hreshold") {
		t.Errorf("a correction does not show the account now, or a threshold:\n%s", corrected)
	}
	if !strings.Contains(corrected, "Told as begun on 2031-08-02, withdrawn on 2031-10-09.") {
		t.Errorf("a correction does not say what is withdrawn:\n%s", corrected)
	}
	if !strings.Contains(text, alerts.Caution) {
		t.Error("an end comes without the caution: no alarm is no all-clear")
	}
}

// reliability.md section 2, case 28: injected headers = 0.
func TestNoHeaderCanBeInjected(t *testing.T) {
	tame := upperBeck(t)
	tame.Corrects, tame.Story = "x", "x"
	plain, tameText, _ := open(t, write(t, tame, options()))
	lines := strings.Count(tameText, "\n")
	rapid.Check(t, func(rt *rapid.T) {
		evil := rapid.SampledFrom([]string{
			"Upper Beck\r\nBcc: thief@example.net", "Upper Beck\nX-Evil: 1\n\nbody", "\rBcc: a@b",
			"=?utf-8?q?x=0D=0ABcc:_thief@example.net?=", "a\u2028Bcc: x", "Aüßere Höhe\r\nBcc: thief@example.net", "\x00\x1b[2J",
		}).Draw(rt, "evil") + rapid.String().Draw(rt, "rest")
		m, o := upperBeck(t), options()
		m.StandName, m.Headline, m.Story, m.Corrects, m.Stand, o.Place = evil, evil, evil, evil, evil, evil
		m.Kind = finding.Kind(evil)
		m.Evidence[0].Name, m.Evidence[0].Source, m.Evidence[0].Unit = evil, evil, evil
		h, text, _ := open(t, write(t, m, o))
		for key := range h {
			if _, ok := plain[key]; !ok {
				rt.Fatalf("new header %q", key)
			}
		}
		for key, want := range map[string]string{"Message-Id": plain.Get("Message-Id"), "To": plain.Get("To")} {
			if h.Get(key) != want {
				rt.Fatalf("%s is now %q", key, h.Get(key))
			}
		}
		from, err := mail.ParseAddress(h.Get("From"))
		if err != nil || from.Address != o.From {
			rt.Fatalf("From is now %q (%v)", h.Get("From"), err)
		}
		decoded, err := new(mime.WordDecoder).DecodeHeader(h.Get("Subject"))
		if err != nil || strings.ContainsAny(decoded, "\r\n\x00") {
			rt.Fatalf("subject decodes to %q (%v)", decoded, err)
		}
		if got := strings.Count(text, "\n"); got != lines {
			rt.Fatalf("the text part has %d lines, want %d:\n%s", got, lines, text)
		}
	})
}

func TestComposeRefuses(t *testing.T) {
	for _, to := range []string{"", "a@b\r\nBcc: c@d", "Name <a@b.example>", "a@b.example, c@d.example", "a b@c.example",
		`"a@b.example"@c.example`, "a@[127.0.0.1]", "a@b@c", "a@b.example>", strings.Repeat("x", 250) + "@b.example"} {
		o := options()
		o.To = []string{to}
		if _, err := Compose(upperBeck(t), o); err == nil {
			t.Errorf("address %q: no error", to)
		}
	}
	for _, id := range []string{"", "sap a", "sap>\r\nBcc: x"} {
		m := upperBeck(t)
		m.ID = id
		if _, err := Compose(m, options()); err == nil {
			t.Errorf("id %q: no error", id)
		}
	}
}

func TestNumber(t *testing.T) {
	for want, in := range map[string]alerts.Number{
		"131 mm": 131.2, "12.4 mm": 12.44, "0.083 mm": 0.0825, "-0.001 mm": -0.001, "1234568 mm": 1234567.8, "3 mm": 3,
		"-1.46 mm": -1.456, "0 mm": alerts.Number(math.Copysign(0, -1)), "unknown": alerts.Number(math.Inf(1)),
	} {
		if got := number(in, "mm"); got != want {
			t.Errorf("number(%v) = %q, want %q", float64(in), got, want)
		}
	}
}
