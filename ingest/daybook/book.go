package daybook

import (
	"fmt"
	"maps"
	"math"
	"slices"
	"strconv"
	"time"

	"github.com/fxamacker/cbor/v2"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// Shelf is where books are read from; nil data means there is none yet.
type Shelf interface {
	Read(key string) ([]byte, error)
}

// Entry is one changed part of a book, to be written under its key.
type Entry struct {
	Key  string
	Data []byte
}

// Options describe a source to its book.
type Options struct {
	Source   string
	Offset   time.Duration // of the source's day from UTC
	Interval time.Duration // between readings, 0 when not known
	Shelf    Shelf         // nil: nothing was kept before
}

// longest is the longest interval that is folded day by day. Composites of
// many days need a shape to be spread by, and come with the satellites.
const longest = 48 * time.Hour

// Span is the first and last day of something.
type Span struct {
	_ struct{} `cbor:",toarray"`

	First, Last quantity.Day
}

func (s Span) with(d quantity.Day) Span {
	return Span{First: min(s.First, d), Last: max(s.Last, d)}
}

// head is what is always held of a book.
type head struct {
	Spans  map[quantity.Quantity]Span // days with any reading
	Offset time.Duration              // the day the pages were folded by
}

// Book is one source's daybook.
type Book struct {
	opts   Options
	head   head
	pages  map[int]page      // by year
	blocks map[int]*dayBlock // readings of days that are not one whole reading
	dirty  map[string]struct{}
}

// dayBlock holds the readings of eight days, for the quantities and days
// whose value is not one whole-day reading.
type dayBlock struct {
	Readings map[quantity.Quantity]map[quantity.Day][]Reading
}

const blockDays = 8

func blockOf(d quantity.Day) int {
	b := int(d) / blockDays
	if d < 0 && int(d)%blockDays != 0 {
		b--
	}
	return b
}

// Open opens the book of a source. A book folded by another offset is refused
// with ErrOffset: its days mean something else.
func Open(opts Options) (*Book, error) {
	b := &Book{
		opts:   opts,
		head:   head{Spans: map[quantity.Quantity]Span{}, Offset: opts.Offset},
		pages:  map[int]page{},
		blocks: map[int]*dayBlock{},
		dirty:  map[string]struct{}{},
	}
	data, err := b.read(b.headKey())
	if err != nil {
		return nil, err
	}
	if len(data) > 0 {
		if err := cbor.Unmarshal(data, &b.head); err != nil {
			return nil, fmt.Errorf("daybook of %s: head: %w", opts.Source, err)
		}
		if b.head.Offset != opts.Offset {
			return nil, fmt.Errorf("daybook of %s: %w: kept by days at UTC%+g h, now UTC%+g h; set utc_offset_hours back, or give the source a new id and load its history again",
				opts.Source, ErrOffset, b.head.Offset.Hours(), opts.Offset.Hours())
		}
	}
	return b, nil
}

// ErrOffset says that a book was kept by days of another offset from UTC.
var ErrOffset = fmt.Errorf("the source's day has moved")

// Refusal says why an observation cannot be kept.
type Refusal struct{ Reason string }

func (r *Refusal) Error() string { return r.Reason }

// Change says which days' values an observation changed; Any is false when it
// said nothing new. Outdated says that it says something else than is known,
// and is not newer.
type Change struct {
	Any         bool
	First, Last quantity.Day
	Outdated    bool
}

// Refuses says why an observation cannot be kept, nil if it can.
func (b *Book) Refuses(o observation.Observation) *Refusal {
	if _, ok := o.Quantity.Info(); !ok {
		return &Refusal{fmt.Sprintf("unknown quantity %q", o.Quantity)}
	}
	switch o = o.In(b.opts.Offset); {
	case o.End.Before(o.Start):
		return &Refusal{fmt.Sprintf("ends (%s) before it starts (%s)", o.End.Format(time.RFC3339), o.Start.Format(time.RFC3339))}
	case o.End.Sub(o.Start) > longest:
		return &Refusal{fmt.Sprintf("speaks for %.3g days; composites of more than 2 days are not in this version yet, send daily values", o.End.Sub(o.Start).Hours()/24)}
	}
	return nil
}

// Add puts an observation into the book. The error is a *Refusal when the
// observation cannot be kept, and anything else when the shelf failed.
func (b *Book) Add(o observation.Observation) (Change, error) {
	if refused := b.Refuses(o); refused != nil {
		return Change{}, refused
	}
	info, _ := o.Quantity.Info()
	o = o.In(b.opts.Offset)
	r := Reading{
		Start: o.Start.UnixNano(), End: o.End.UnixNano(), Value: oneNaN(o.Value), SD: oneNaN(o.SD), Flag: o.Flag,
		Available: o.Available.Truncate(time.Millisecond).UnixNano(),
	}
	first, last := quantity.DayOf(o.Start, b.opts.Offset), quantity.DayEndingAt(o.End, b.opts.Offset)
	if o.Start.Equal(o.End) {
		first = last
	}
	var all Change
	for d := first; d <= last; d++ {
		changed, outdated, err := b.addToDay(d, o.Quantity, info.Fold, r)
		if err != nil {
			return all, err
		}
		all.Outdated = all.Outdated || outdated
		if changed && !all.Any {
			all.Any, all.First, all.Last = true, d, d
		} else if changed {
			all.Last = d
		}
	}
	return all, nil
}

// oneNaN gives "unknown" one pattern of bits, so that it compares and hashes
// the same wherever it came from.
func oneNaN(v float64) float64 {
	if math.IsNaN(v) {
		return math.NaN()
	}
	return v
}

func (b *Book) addToDay(d quantity.Day, q quantity.Quantity, how quantity.Fold, r Reading) (changed, outdated bool, err error) {
	p, err := b.page(d.Year())
	if err != nil {
		return false, false, err
	}
	c := p[q]
	if c == nil {
		c = newColumn()
		p[q] = c
	}
	start, end := d.Start(b.opts.Offset), d.End(b.opts.Offset)
	from, to := start.UnixNano(), end.UnixNano()
	i := d.YearDay() - 1
	had, known := c.get(i, end)
	isWhole := r.Start == from && r.End == to

	if isWhole && (!known || c.Flag[i]&whole != 0) { // the common case: one reading makes the day
		if known {
			old := Reading{Start: from, End: to, Value: had.Value, SD: had.SD, Flag: had.Flag, Available: had.Available.UnixNano()}
			if !r.newer(old) {
				return false, !r.sameContent(old), nil
			}
		}
		// Kept as it came, whatever its flag: the page is all there is of it.
		v := observation.DayValue{Value: r.Value, SD: r.SD, Flag: r.Flag, Available: time.Unix(0, r.Available).UTC()}
		return b.setDay(d, q, c, i, v, true, end, had, known), false, nil
	}

	list, err := b.readings(d, q)
	if err != nil {
		return false, false, err
	}
	if known && c.Flag[i]&whole != 0 {
		list, _, _ = insert(list, Reading{Start: from, End: to, Value: had.Value, SD: had.SD, Flag: had.Flag, Available: had.Available.UnixNano()})
	}
	list, written, outdated := insert(list, r)
	v := fold(how, from, to, b.opts.Interval, list)
	if !written && known && c.Flag[i]&whole == 0 && sameDay(had, v) {
		return false, outdated, nil
	}
	// A reading that is there while its day is not: a save broke off between
	// the two.
	if written {
		if err := b.setReadings(d, q, list); err != nil {
			return false, false, err
		}
	}
	return b.setDay(d, q, c, i, v, false, end, had, known), outdated, nil
}

func (b *Book) setDay(d quantity.Day, q quantity.Quantity, c *column, i int, v observation.DayValue, isWhole bool, end time.Time, had observation.DayValue, known bool) bool {
	c.set(i, v, isWhole, end)
	b.dirty[b.pageKey(d.Year())] = struct{}{}
	span, ok := b.head.Spans[q]
	if !ok {
		span = Span{First: d, Last: d}
	}
	if wide := span.with(d); !ok || wide != span {
		b.head.Spans[q] = wide
		b.dirty[b.headKey()] = struct{}{}
	}
	return !known || !sameValue(had, v)
}

func sameValue(a, b observation.DayValue) bool {
	return sameFloat(a.Value, b.Value) && sameFloat(a.SD, b.SD) && a.Flag == b.Flag
}

func sameDay(a, b observation.DayValue) bool {
	return sameValue(a, b) && a.Available.Equal(b.Available)
}

// Day returns the day value of q, and whether anything came for that day.
func (b *Book) Day(q quantity.Quantity, d quantity.Day) (observation.DayValue, bool, error) {
	span, ok := b.head.Spans[q]
	if !ok || d < span.First || d > span.Last {
		return observation.DayValue{}, false, nil
	}
	p, err := b.page(d.Year())
	if err != nil {
		return observation.DayValue{}, false, err
	}
	c := p[q]
	if c == nil {
		return observation.DayValue{}, false, nil
	}
	v, ok := c.get(d.YearDay()-1, d.End(b.opts.Offset))
	return v, ok, nil
}

// Has tells whether the source has ever sent q, and for which days.
func (b *Book) Has(q quantity.Quantity) (Span, bool) {
	s, ok := b.head.Spans[q]
	return s, ok
}

// Changed returns the parts that changed since Saved, in the order in which
// they must be written if not at once: head, readings, pages. If a write breaks
// off anywhere in it, adding the same observations again mends the book: a page
// tells of nothing that its head and readings do not have.
func (b *Book) Changed() ([]Entry, error) {
	entries := make([]Entry, 0, len(b.dirty))
	keys := slices.Sorted(maps.Keys(b.dirty))
	slices.Reverse(keys) // source before readings before page
	for _, key := range keys {
		data, err := b.encode(key)
		if err != nil {
			return nil, fmt.Errorf("daybook of %s: %s: %w", b.opts.Source, key, err)
		}
		entries = append(entries, Entry{Key: key, Data: data})
	}
	return entries, nil
}

func (b *Book) encode(key string) ([]byte, error) {
	if key == b.headKey() {
		return encode(b.head)
	}
	for y, p := range b.pages {
		if b.pageKey(y) == key {
			return encode(p)
		}
	}
	for n, block := range b.blocks {
		if b.blockKey(n) == key {
			return encode(block)
		}
	}
	return nil, fmt.Errorf("no such part")
}

// Saved says that what Changed returned is on the shelf.
func (b *Book) Saved() { clear(b.dirty) }

// Trim lets go of pages of years before keep and of readings of days before
// it, unless they are still to be saved. They are read again when needed.
// Without a shelf nothing is let go.
func (b *Book) Trim(keep quantity.Day) {
	if b.opts.Shelf == nil {
		return
	}
	for y := range b.pages {
		if _, dirty := b.dirty[b.pageKey(y)]; !dirty && y < keep.Year() {
			delete(b.pages, y)
		}
	}
	for n := range b.blocks {
		if _, dirty := b.dirty[b.blockKey(n)]; !dirty && n < blockOf(keep) {
			delete(b.blocks, n)
		}
	}
}

func (b *Book) headKey() string         { return "source." + b.opts.Source }
func (b *Book) pageKey(year int) string { return "page." + b.opts.Source + "." + strconv.Itoa(year) }
func (b *Book) blockKey(n int) string {
	return "readings." + b.opts.Source + "." + strconv.Itoa(n*blockDays)
}

func (b *Book) read(key string) ([]byte, error) {
	if b.opts.Shelf == nil {
		return nil, nil
	}
	data, err := b.opts.Shelf.Read(key)
	if err != nil {
		return nil, fmt.Errorf("daybook of %s: read %s: %w", b.opts.Source, key, err)
	}
	return data, nil
}

func (b *Book) page(year int) (page, error) {
	if p, ok := b.pages[year]; ok {
		return p, nil
	}
	data, err := b.read(b.pageKey(year))
	if err != nil {
		return nil, err
	}
	p, err := decodePage(data)
	if err != nil {
		return nil, fmt.Errorf("daybook of %s: page %d: %w", b.opts.Source, year, err)
	}
	b.pages[year] = p
	return p, nil
}

func (b *Book) block(n int) (*dayBlock, error) {
	if block, ok := b.blocks[n]; ok {
		return block, nil
	}
	data, err := b.read(b.blockKey(n))
	if err != nil {
		return nil, err
	}
	block := &dayBlock{}
	if len(data) > 0 {
		if err := cbor.Unmarshal(data, block); err != nil {
			return nil, fmt.Errorf("daybook of %s: readings from %s: %w", b.opts.Source, quantity.Day(n*blockDays), err)
		}
	}
	if block.Readings == nil {
		block.Readings = map[quantity.Quantity]map[quantity.Day][]Reading{}
	}
	b.blocks[n] = block
	return block, nil
}

func (b *Book) readings(d quantity.Day, q quantity.Quantity) ([]Reading, error) {
	block, err := b.block(blockOf(d))
	if err != nil {
		return nil, err
	}
	return block.Readings[q][d], nil
}

func (b *Book) setReadings(d quantity.Day, q quantity.Quantity, list []Reading) error {
	block, err := b.block(blockOf(d))
	if err != nil {
		return err
	}
	if block.Readings[q] == nil {
		block.Readings[q] = map[quantity.Day][]Reading{}
	}
	block.Readings[q][d] = list
	b.dirty[b.blockKey(blockOf(d))] = struct{}{}
	return nil
}
