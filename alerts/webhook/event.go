package webhook

import (
	"bytes"
	"crypto/hmac"
	"crypto/sha256"
	"encoding/base64"
	"encoding/json"
	"fmt"
	"strconv"
	"strings"
	"time"

	"saprolite/alerts"
)

// event is a CloudEvent 1.0 in JSON (cloudevents/spec: spec.md,
// formats/json-format.md), with the extension attribute sequence
// (extensions/sequence.md): later revisions of an episode sort after earlier
// ones as text.
type event struct {
	SpecVersion     string         `json:"specversion"`
	ID              string         `json:"id"`
	Source          string         `json:"source"`
	Type            string         `json:"type"`
	Subject         string         `json:"subject,omitempty"`
	Time            string         `json:"time"`
	Sequence        string         `json:"sequence"`
	DataContentType string         `json:"datacontenttype"`
	Data            alerts.Message `json:"data"`
}

// Event writes m as the body of a structured CloudEvent. source and the
// message's id together name the event; both stay the same in every retry, and
// so does every byte. It returns an error when the message has no id or kind.
func Event(m alerts.Message, source string) ([]byte, error) {
	if m.ID == "" || m.Revision < 1 || m.Kind == "" {
		return nil, fmt.Errorf("writing an event: the message has id %q, revision %d, kind %q; expected all three", m.ID, m.Revision, m.Kind)
	}
	var b bytes.Buffer
	e := json.NewEncoder(&b)
	e.SetEscapeHTML(false) // it is not HTML; "<" stays "<"
	err := e.Encode(event{
		SpecVersion: "1.0", ID: m.MessageID(), Source: source,
		Type: "saprolite.alert." + string(m.Kind), Subject: m.Stand,
		Time:     m.Sent.UTC().Format(time.RFC3339),
		Sequence: fmt.Sprintf("%04d", m.Revision), DataContentType: "application/json", Data: m,
	})
	if err != nil {
		return nil, fmt.Errorf("writing event %s: %w", m.MessageID(), err)
	}
	return bytes.TrimSuffix(b.Bytes(), []byte("\n")), nil
}

// decodeSecret reads a Standard Webhooks secret: whsec_ and 24 to 64 bytes in
// base64. Its errors do not show it.
func decodeSecret(s string) ([]byte, error) {
	coded, ok := strings.CutPrefix(s, "whsec_")
	if !ok {
		return nil, fmt.Errorf("secret: expected whsec_ and 24 to 64 random bytes in base64, such as from: echo whsec_$(openssl rand -base64 32)")
	}
	key, err := base64.StdEncoding.DecodeString(coded)
	if err != nil {
		return nil, fmt.Errorf("secret: what follows whsec_ is not base64")
	}
	if len(key) < 24 || len(key) > 64 {
		return nil, fmt.Errorf("secret: holds %d bytes, expected 24 to 64", len(key))
	}
	return key, nil
}

// sign is the webhook-signature: HMAC-SHA256 over id.timestamp.body, scheme v1
// of Standard Webhooks 1.0.0.
func sign(key []byte, id string, at time.Time, body []byte) string {
	h := hmac.New(sha256.New, key)
	h.Write([]byte(id + "." + strconv.FormatInt(at.Unix(), 10) + "."))
	h.Write(body)
	return "v1," + base64.StdEncoding.EncodeToString(h.Sum(nil))
}
