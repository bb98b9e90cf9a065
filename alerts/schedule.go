package alerts

import (
	"crypto/sha256"
	"encoding/binary"
	"fmt"
	"time"
)

// Schedule says when a failed delivery is tried again.
type Schedule struct {
	// Delays[0] is the wait before the first attempt, Delays[k] the wait
	// between the failure of attempt k and attempt k+1.
	Delays []time.Duration
	// GiveUpAfter ends the tries: with 0 the message is given up when Delays
	// are used up; otherwise the last delay repeats, and the message is given
	// up when the next attempt would come later than this after the first.
	GiveUpAfter time.Duration
	// Early and Late are the shares of a delay by which jitter may shorten and
	// lengthen it, so that many senders do not knock at the same moment.
	Early, Late float64
}

// WebhookSchedule is the example schedule of Standard Webhooks 1.0.0, spread
// by 20 % either way (reliability.md section 3): ten attempts in 75.6 h.
func WebhookSchedule() Schedule {
	return Schedule{
		Delays: []time.Duration{0, 5 * time.Second, 5 * time.Minute, 30 * time.Minute, 2 * time.Hour,
			5 * time.Hour, 10 * time.Hour, 14 * time.Hour, 20 * time.Hour, 24 * time.Hour},
		Early: 0.2, Late: 0.2,
	}
}

// MailSchedule is for a mail relay (reliability.md section 3, after RFC 5321
// section 4.5.4.1: 30 minutes or more between tries, give up after 4 to 5
// days); the two early tries suit a local relay. Jitter only lengthens, so that
// the 30 minutes hold; its size is the webhook's.
func MailSchedule() Schedule {
	return Schedule{
		Delays: []time.Duration{0, time.Minute, 5 * time.Minute, 30 * time.Minute,
			time.Hour, 2 * time.Hour, 4 * time.Hour},
		GiveUpAfter: 5 * 24 * time.Hour,
		Late:        0.2,
	}
}

// after returns the wait after the given number of failed attempts of message
// id, and false when no further attempt is foreseen. The same id and number
// always give the same wait.
func (s Schedule) after(id string, failed int) (time.Duration, bool) {
	if failed >= len(s.Delays) {
		if s.GiveUpAfter == 0 {
			return 0, false
		}
		return s.jitter(s.Delays[len(s.Delays)-1], id, failed), true
	}
	return s.jitter(s.Delays[failed], id, failed), true
}

// jitter draws from [d*(1-Early), d*(1+Late)), seeded by id and attempt.
func (s Schedule) jitter(d time.Duration, id string, attempt int) time.Duration {
	h := sha256.Sum256(fmt.Appendf(nil, "%s\x00%d", id, attempt))
	u := float64(binary.BigEndian.Uint64(h[:8])>>11) / (1 << 53) // 53 bits: a float64's own
	return time.Duration(float64(d) * (1 - s.Early + u*(s.Early+s.Late)))
}

// longest is a wait that the schedule never exceeds.
func (s Schedule) longest() time.Duration {
	var most time.Duration
	for _, d := range s.Delays {
		most = max(most, d)
	}
	return time.Duration(float64(most) * (1 + s.Late))
}

func (s Schedule) validate() error {
	switch {
	case len(s.Delays) == 0:
		return fmt.Errorf("retry schedule has no delays: give at least the wait before the first attempt, usually 0")
	case s.Early < 0 || s.Early > 1 || s.Late < 0 || s.Late > 1:
		return fmt.Errorf("retry schedule: jitter shares %v and %v must lie between 0 and 1", s.Early, s.Late)
	case s.GiveUpAfter < 0:
		return fmt.Errorf("retry schedule: give-up time %v is negative", s.GiveUpAfter)
	case s.GiveUpAfter > 0 && s.Delays[len(s.Delays)-1] < time.Second:
		return fmt.Errorf("retry schedule: the last delay %v repeats and must be at least 1 s", s.Delays[len(s.Delays)-1])
	}
	for _, d := range s.Delays {
		if d < 0 {
			return fmt.Errorf("retry schedule: delay %v is negative", d)
		}
	}
	return nil
}
