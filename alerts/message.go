// Package alerts turns findings into messages: what is new, what changed, what
// ended; and carries messages to their destinations, each with its own book.
//
// The Teller decides what is said; a Courier brings it to one Destination.
// How a message looks when it leaves is the destination's matter
// (alerts/mail, alerts/webhook).
package alerts

import (
	"crypto/sha256"
	"encoding/base32"
	"encoding/json"
	"fmt"
	"math"
	"strings"
	"time"

	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

// MsgType is CAP's message type.
type MsgType string

const (
	Alert  MsgType = "Alert"
	Update MsgType = "Update"
	Cancel MsgType = "Cancel"
)

// Status is CAP's status.
type Status string

const (
	Actual   Status = "Actual"
	Exercise Status = "Exercise"
)

// EndedWhy says why an episode ended.
type EndedWhy string

const (
	Over      EndedWhy = "over"      // the condition passed
	Corrected EndedWhy = "corrected" // later data show it did not hold
)

// Caution goes with every message (design 5.7).
const Caution = "Computed, not seen. No alarm is no all-clear. Do not enter brown or storm-hit stands because of it; dead limbs fall. Fell, burn, close or water only after a visit and by local rules and licensed practice."

// Number is a float64 that is JSON null when unknown (NaN).
type Number float64

func (n Number) MarshalJSON() ([]byte, error) {
	if math.IsNaN(float64(n)) || math.IsInf(float64(n), 0) {
		return []byte("null"), nil
	}
	return json.Marshal(float64(n))
}

func (n *Number) UnmarshalJSON(b []byte) error {
	if string(b) == "null" {
		*n = Number(math.NaN())
		return nil
	}
	return json.Unmarshal(b, (*float64)(n))
}

// Known tells whether the number is known.
func (n Number) Known() bool { return !math.IsNaN(float64(n)) }

// Evidence is one number behind a message.
type Evidence struct {
	Name   string `json:"name"`
	Value  Number `json:"value"`
	Low    Number `json:"low"`
	High   Number `json:"high"`
	Unit   string `json:"unit"`
	Source string `json:"source"`
}

// Threshold is what the evidence was held against.
type Threshold struct {
	Value Number `json:"value"`
	Unit  string `json:"unit"`
	Basis string `json:"basis"`
}

// Message is one alert message: design 5.7, the data of the CloudEvent and a
// line of a hindcast. Times are UTC and are written as RFC 3339 to the second.
type Message struct {
	ID         string        `json:"id"` // the episode's
	Revision   int           `json:"revision"`
	MsgType    MsgType       `json:"msg_type"`
	Status     Status        `json:"status"`
	Sent       time.Time     `json:"sent"`
	Told       bool          `json:"told"` // false: recorded only
	Late       bool          `json:"late"` // made by data that came in late
	Stand      string        `json:"stand"`
	StandName  string        `json:"stand_name"`
	Groups     []string      `json:"groups"`
	Hectares   Number        `json:"hectares"`
	Kind       finding.Kind  `json:"kind"`
	Level      finding.Level `json:"level"`
	Severity   string        `json:"severity"`
	Urgency    string        `json:"urgency"`
	Certainty  string        `json:"certainty"`
	Day        quantity.Day  `json:"day"`
	Onset      quantity.Day  `json:"onset"`
	Ended      quantity.Day  `json:"ended"` // "" while open
	EndedWhy   EndedWhy      `json:"ended_why"`
	Headline   string        `json:"headline"`
	Reason     string        `json:"reason"`
	Evidence   []Evidence    `json:"evidence"`
	Threshold  Threshold     `json:"threshold"`
	FieldCheck string        `json:"field_check"`
	Caution    string        `json:"caution"`
	EndsWhen   string        `json:"ends_when"`
	Corrects   string        `json:"corrects"` // message id this one corrects
	Story      string        `json:"story"`    // joins episodes that tell one story
}

// MessageID is the message's own id, the same in every retry: CloudEvent id,
// webhook-id, CAP identifier and left part of the Message-ID (design 5.7).
func (m Message) MessageID() string { return fmt.Sprintf("%s-%04d", m.ID, m.Revision) }

// Open tells whether the episode was still open when the message was made.
func (m Message) Open() bool { return m.MsgType != Cancel }

// EpisodeID names an episode by place, stand, kind and onset. It holds only
// [a-z2-7-], so it is valid wherever an id must go (reliability.md section 3).
func EpisodeID(place, stand string, kind finding.Kind, onset quantity.Day) string {
	h := sha256.Sum256([]byte(strings.Join([]string{place, stand, string(kind), onset.String()}, "\x00")))
	enc := base32.StdEncoding.WithPadding(base32.NoPadding).EncodeToString(h[:])
	return "sap-" + strings.ToLower(enc[:26])
}
