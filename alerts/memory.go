package alerts

import "saprolite/detectors/finding"

// Memory is a Record that lasts as long as the process: for a hindcast and
// for tests.
type Memory struct {
	Messages []Message
	last     map[subject]uint64 // place of the last message, counted from 1
}

func (r *Memory) Last(stand string, kind finding.Kind) (Message, uint64, error) {
	place := r.last[subject{stand, kind}]
	if place == 0 {
		return Message{}, 0, nil
	}
	return r.Messages[place-1], place, nil
}

func (r *Memory) Append(m Message, after uint64) (uint64, error) {
	key := subject{m.Stand, m.Kind}
	if r.last[key] != after {
		return 0, ErrMoved
	}
	if r.last == nil {
		r.last = map[subject]uint64{}
	}
	r.Messages = append(r.Messages, m)
	r.last[key] = uint64(len(r.Messages))
	return r.last[key], nil
}
