package config

import (
	"encoding/base64"
	"fmt"
	"net"
	"net/netip"
	"strings"
)

// Destination is where messages go. Exactly one of Mail and Webhook is set.
// Filters that are empty let everything through.
type Destination struct {
	Name    string
	Mail    *Mail
	Webhook *Webhook
	Kinds   []string // alert kinds (design 5.6)
	Groups  []string // stands of any of these groups
	Levels  []string // in our words (design 5.6)
}

// Mail is an SMTP server and who writes to whom.
type Mail struct {
	Server   string // host:port
	From     string
	To       []string
	Username string // empty: no authentication
	Password Secret
	// Plain sends without TLS, to this machine only; otherwise STARTTLS must
	// succeed.
	Plain bool
}

// Webhook is a URL that messages are posted to.
type Webhook struct {
	URL    string
	Secret Secret // whsec_ and base64 (Standard Webhooks 1.0.0); unset: unsigned
	// AllowPrivate are the private networks the URL's name may resolve into;
	// without one a webhook reaches public addresses only.
	AllowPrivate []netip.Prefix
}

// The words of design 5.6 that filters take: what this version raises, and
// what later ones will.
var (
	kinds      = []string{"store-low", "feed-silent"}
	laterKinds = []string{
		"refill-shortfall", "run-out", "water-potential", "hydraulic-decline", "green-without-rain", "browning-with-water",
		"follows-rain-again", "rain-response", "hot-dry-air", "account-doubtful", "sensor-suspect",
	}
	levels = []string{"drawing down", "low", "nearly spent", "spent", "silent", "blind"}
)

func (l *loader) destinations(top *section) []Destination {
	var out []Destination
	seen := names{}
	for _, s := range l.list(top, "destinations") {
		d := Destination{Name: seen.read(s, isID)}
		s.later = []string{"cap", "zone", "quiet_hours", "gather_for", "next_after", "remind_after", "most_a_day", "most_a_week"}
		mail, hasMail := s.open("mail")
		webhook, hasWebhook := s.open("webhook")
		switch {
		case hasMail && hasWebhook:
			s.complainAt("webhook", "both mail and webhook are given", "make two destinations of it")
		case !hasMail && !hasWebhook && !s.wrong:
			s.complain(s.node.at, s.path, "neither mail nor webhook is given", "write mail: or webhook: with its settings")
		}
		if hasMail {
			d.Mail = l.mail(mail)
		}
		if hasWebhook {
			d.Webhook = l.webhook(webhook)
		}
		d.Kinds = s.texts("kinds", oneOfNow(kinds, laterKinds))
		d.Groups = s.texts("groups", oneLine)
		l.placeTexts(s.node.get("groups"), func(group string) string { return groupField(d.Name, group) })
		d.Levels = s.texts("levels", oneOf(levels...))
		s.done()
		out = append(out, d)
	}
	return out
}

func (l *loader) mail(s *section) *Mail {
	s.required("server", `write host:port, such as "mail.example.org:587"`)
	s.required("from", "write the address the messages come from")
	s.required("to", "write who shall read the messages")
	m := &Mail{
		Server:   s.text("server", "", server),
		From:     s.text("from", "", mailAddress),
		To:       s.texts("to", mailAddress),
		Username: s.text("username", "", oneLine),
		Password: l.secret(s, "password_file"),
		Plain:    s.text("tls", "starttls", oneOf("starttls", "none")) == "none",
	}
	if to := s.node.get("to"); to != nil && to.kind == list && len(to.list()) == 0 {
		s.complainAt("to", "nobody is listed", "write who shall read the messages")
	}
	user, password := s.node.get("username") != nil, s.node.get("password_file") != nil
	switch {
	case user && !password:
		s.complainAt("username", "has no password_file beside it", "add it, or remove username")
	case password && !user:
		s.complainAt("password_file", "has no username beside it", "add it, or remove password_file")
	}
	if host, _, err := net.SplitHostPort(m.Server); m.Plain && err == nil && !loopback(host) {
		s.complainAt("tls", fmt.Sprintf("none would send mail to %s in clear", host), "write starttls; none is for a server on this machine")
	}
	s.done()
	return m
}

func (l *loader) webhook(s *section) *Webhook {
	s.required("url", `write "https://hooks.example.org/forest"`)
	w := &Webhook{URL: s.text("url", "", webhookURL), Secret: l.secret(s, "secret_file")}
	if w.Secret.Set() && !standardSecret(w.Secret.Reveal()) {
		s.complainAt("secret_file", "its content is not whsec_ and the base64 of 24 to 64 bytes", `make one: printf 'whsec_%s\n' "$(openssl rand -base64 32)"`)
	}
	for _, text := range s.texts("allow_private", privateNetwork) {
		w.AllowPrivate = append(w.AllowPrivate, netip.MustParsePrefix(text)) // obeyed privateNetwork
	}
	s.done()
	return w
}

// standardSecret holds a signing secret against Standard Webhooks 1.0.0: whsec_
// and the base64 of 24 to 64 bytes (check-values section 12,
// "standard-webhooks").
func standardSecret(s string) bool {
	encoded, ok := strings.CutPrefix(s, "whsec_")
	key, err := base64.StdEncoding.DecodeString(encoded)
	return ok && err == nil && len(key) >= 24 && len(key) <= 64
}
