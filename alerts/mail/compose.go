package mail

import (
	"bytes"
	"embed"
	"fmt"
	htmltemplate "html/template"
	"math"
	"net/mail"
	"regexp"
	"strconv"
	"strings"
	texttemplate "text/template"
	"time"

	gomail "github.com/wneessen/go-mail"

	"saprolite/alerts"
	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

//go:embed message.txt.tmpl message.html.tmpl
var templates embed.FS

var (
	textBody = texttemplate.Must(texttemplate.ParseFS(templates, "message.txt.tmpl"))
	htmlBody = htmltemplate.Must(htmltemplate.ParseFS(templates, "message.html.tmpl"))
)

// episodeID is what may stand in a Message-ID and a boundary as it is.
var episodeID = regexp.MustCompile(`^[a-z0-9-]{1,50}$`)

// threadDepth is how many earlier revisions References names besides the
// first: enough for mail programs to join the thread, and short lines; our
// choice.
const threadDepth = 9

// Compose writes m as a mail, without sending it. Of o it uses Name, From, To
// and Place. The same message and options give the same mail, byte for byte.
//
// Subject, Message-ID, In-Reply-To and References make one thread of an
// episode (RFC 5322 section 3.6.4); Auto-Submitted is RFC 3834's, List-Id RFC
// 2919's. It returns an error for an address that is not plain or a message
// without id.
func Compose(m alerts.Message, o Options) (*gomail.Msg, error) {
	if !episodeID.MatchString(m.ID) || m.Revision < 1 {
		return nil, fmt.Errorf("composing a mail: the message has id %q and revision %d; expected an episode's id and 1 or more", m.ID, m.Revision)
	}
	for _, a := range append([]string{o.From}, o.To...) {
		if err := checkAddress(a); err != nil {
			return nil, fmt.Errorf("composing mail %s: %w", m.MessageID(), err)
		}
	}
	domain := domainOf(o.From)
	id := func(revision int) string {
		e := m
		e.Revision = revision
		return "<" + e.MessageID() + "@" + domain + ">"
	}
	msg := gomail.NewMsg(gomail.WithNoDefaultUserAgent(), gomail.WithBoundary(m.MessageID()+"-parts"))
	// Not FromFormat: it does not quote a name that holds a quotation mark.
	msg.FromMailAddress(&mail.Address{Name: strings.TrimSpace("saprolite " + forHeader(o.Place)), Address: o.From})
	if err := msg.To(o.To...); err != nil {
		return nil, fmt.Errorf("composing mail %s: %w", m.MessageID(), err)
	}
	msg.Subject(subject(m, o.Place))
	msg.SetDateWithValue(m.Sent.UTC())
	msg.SetGenHeader(gomail.HeaderMessageID, id(m.Revision))
	if m.Revision > 1 {
		refs := []string{id(1)}
		for r := max(2, m.Revision-threadDepth); r < m.Revision; r++ {
			refs = append(refs, id(r))
		}
		msg.SetGenHeader(gomail.HeaderInReplyTo, id(m.Revision-1))
		msg.SetGenHeader(gomail.HeaderReferences, strings.Join(refs, " "))
	}
	msg.SetGenHeader("Auto-Submitted", "auto-generated")
	msg.SetGenHeader("List-Id", "saprolite alerts <"+o.Name+".alerts."+domain+">")

	v := newView(m, o.Place)
	var text, html bytes.Buffer
	if err := textBody.Execute(&text, v); err != nil {
		return nil, fmt.Errorf("composing mail %s: %w", m.MessageID(), err)
	}
	if err := htmlBody.Execute(&html, v); err != nil {
		return nil, fmt.Errorf("composing mail %s: %w", m.MessageID(), err)
	}
	msg.SetBodyString(gomail.TypeTextPlain, text.String())
	msg.AddAlternativeString(gomail.TypeTextHTML, html.String())
	return msg, nil
}

// subject is the same for every revision of an episode, so that mail programs
// keep them together. It names the matter, not the level: that changes, and
// stands in the first line of the text, which a phone shows below the subject.
func subject(m alerts.Message, place string) string {
	s := forHeader(standName(m) + ": " + matter(m.Kind))
	if p := forHeader(place); p != "" {
		s = "[" + p + "] " + s
	}
	if m.Status == alerts.Exercise {
		s = "EXERCISE " + s
	}
	return s
}

// forHeader is oneLine without anything that a reader would take for an
// encoded word of RFC 2047 and decode, perhaps to line ends.
func forHeader(s string) string { return strings.ReplaceAll(oneLine(s), "=?", "= ?") }

// matter is what a kind is about, in words that fit its end as well.
func matter(k finding.Kind) string {
	switch k {
	case finding.StoreLow:
		return "stored water"
	case finding.FeedSilent:
		return "data missing"
	}
	return strings.ReplaceAll(oneLine(string(k)), "-", " ")
}

func standName(m alerts.Message) string {
	if n := oneLine(m.StandName); n != "" {
		return n
	}
	return oneLine(m.Stand)
}

// view is what the two templates show.
type view struct {
	Exercise bool
	Ended    bool
	Late     bool
	Headline string // what
	Where    string
	When     string
	HowSure  string
	Colour   htmltemplate.CSS
	Matter   string

	Reason     string
	Evidence   []row
	Threshold  string
	Basis      string
	FieldCheck string
	EndsWhen   string
	Caution    string
	Small      []string
}

type row struct{ Name, Value, Interval, Source string }

func newView(m alerts.Message, place string) view {
	v := view{
		Exercise: m.Status == alerts.Exercise,
		Ended:    m.MsgType == alerts.Cancel,
		Late:     m.Late,
		Headline: oneLine(m.Headline),
		Where:    standName(m),
		When:     when(m),
		HowSure:  howSure(m.Certainty),
		Colour:   colour(m),
		Matter:   matter(m.Kind),
		Reason:   oneLine(m.Reason),
		Basis:    oneLine(m.Threshold.Basis),
		Caution:  oneLine(m.Caution),
	}
	if m.Hectares.Known() && m.Hectares > 0 {
		v.Where += ", " + number(m.Hectares, "ha")
	}
	if p := oneLine(place); p != "" {
		v.Where += ", " + p
	}
	if v.Headline == "" {
		v.Headline = strings.ToUpper(v.Matter[:1]) + v.Matter[1:] + ": " + oneLine(string(m.Level))
	}
	for _, e := range m.Evidence {
		r := row{Name: oneLine(e.Name), Value: number(e.Value, e.Unit), Source: oneLine(e.Source)}
		if e.Low.Known() && e.High.Known() {
			r.Interval = number(e.Low, "") + " to " + number(e.High, e.Unit)
		}
		v.Evidence = append(v.Evidence, r)
	}
	v.FieldCheck = oneLine(m.FieldCheck)
	if !v.Ended { // an end has no end of its own, and what it was held against is past
		v.EndsWhen = oneLine(m.EndsWhen)
		if v.Basis != "" || m.Threshold.Value.Known() {
			v.Threshold = number(m.Threshold.Value, m.Threshold.Unit)
		}
	}
	v.Small = []string{"Message " + m.MessageID() + ", sent " + m.Sent.UTC().Format(time.RFC3339)}
	if m.Corrects != "" {
		v.Small = append(v.Small, "Corrects "+oneLine(m.Corrects))
	}
	if m.Story != "" && m.Story != m.ID {
		v.Small = append(v.Small, "Story "+oneLine(m.Story))
	}
	v.Small = append(v.Small, "Stand "+oneLine(m.Stand)+", kind "+oneLine(string(m.Kind)))
	return v
}

// when says since when, until when and as of when.
func when(m alerts.Message) string {
	switch {
	case m.MsgType == alerts.Cancel && m.EndedWhy == alerts.Corrected:
		return "Told as begun on " + date(m.Onset) + ", withdrawn on " + date(m.Ended)
	case m.MsgType == alerts.Cancel:
		return "Began on " + date(m.Onset) + ", ended on " + date(m.Ended)
	case m.Day == m.Onset || m.Day == quantity.NoDay:
		return "Since " + date(m.Onset)
	}
	return "Since " + date(m.Onset) + ", as of " + date(m.Day)
}

// date writes a day as the detectors' sentences do (ISO 8601), so that one mail
// has one way of writing days.
func date(d quantity.Day) string {
	if d == quantity.NoDay {
		return "an unknown day"
	}
	return d.String()
}

// howSure puts CAP's certainty, which counts independent sources, in plain
// words (design 5.6).
func howSure(certainty string) string {
	switch certainty {
	case "Observed":
		return "observed directly"
	case "Likely":
		return "several independent sources agree"
	case "Possible":
		return "one source only"
	}
	return "not known"
}

// colour is the bar beside the first lines. The levels are one hue, violet,
// the less water the darker: what is told apart by lightness alone stays so in
// every kind of colour blindness and in grey print. Violet, because green to
// brown would be read as the state of the leaves and blue as water seen, and
// the account has seen neither. What is no level of water has no hue: slate for
// an end, charcoal for missing data. CIE lightness from 60 down to 11, any two
// at least 6 apart; every level stands in words as well. Our own choice.
func colour(m alerts.Message) htmltemplate.CSS {
	if m.MsgType == alerts.Cancel {
		return "#74828f"
	}
	switch m.Level {
	case finding.DrawingDown:
		return "#9d84d2"
	case finding.Low:
		return "#7f5fb8"
	case finding.NearlySpent:
		return "#553192"
	case finding.Spent:
		return "#2a1046"
	}
	return "#333537"
}

// number writes a value with about three significant digits and its unit; an
// unknown one as "unknown".
func number(n alerts.Number, unit string) string {
	v := float64(n)
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return "unknown"
	}
	var s string
	switch a := math.Abs(v); {
	case v == math.Trunc(v) || a >= 100:
		s = strconv.FormatFloat(math.Round(v)+0, 'f', 0, 64) // + 0: no "-0"
	case a >= 10:
		s = strconv.FormatFloat(v, 'f', 1, 64)
	case a >= 0.1:
		s = strconv.FormatFloat(v, 'f', 2, 64)
	default:
		s = strconv.FormatFloat(v, 'g', 2, 64)
	}
	if u := oneLine(unit); u != "" && u != "1" {
		s += " " + u
	}
	return s
}

// oneLine turns control characters and line ends into spaces, and any run of
// spaces into one: what comes from files and feeds cannot start a new line.
func oneLine(s string) string {
	s = strings.ToValidUTF8(s, "?")
	return strings.Join(strings.FieldsFunc(s, func(r rune) bool {
		return r <= ' ' || r == 0x7f || (r >= 0x80 && r <= 0xa0) || r == 0x2028 || r == 0x2029
	}), " ")
}
