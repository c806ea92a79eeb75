package main

import (
	"fmt"
	"strconv"
	"strings"

	"offbeat/capture/sim"
)

// What happens in a scene at set times is lists: trims, retunes, absences, and
// with them spurs. A simSpec keeps each as its canonical text, items joined by
// commas, so that it stays comparable; reading that text gives the same list.

// itemKind is how one kind of item is read and written.
type itemKind[T any] struct {
	shape string // what an item must be, for an error
	read  func(string) (T, error)
	write func(T) string
}

var (
	trimItem   = itemKind[sim.Turn]{"TIME:HZ, or TIME:HZ/TIME to turn slowly: 20s:-4Hz/30s turns by -4 Hz from 20 s to 50 s", readTrim, writeTrim}
	retuneItem = itemKind[sim.Step]{"TIME:HZ: 60s:+200Hz moves both tones up by 200 Hz at 60 s", readRetune, writeRetune}
	awayItem   = itemKind[[2]float64]{"TIME-TIME: 60s-90s is away from 60 s to 90 s", readAway, writeAway}
	spurItem   = itemKind[sim.Spur]{"HZ:DB: 150Hz:-40dB is a tone at 150 Hz, 40 dB below full scale", readSpur, writeSpur}
)

// maxItems in a list are more than anyone writes; all are looked at in every
// step of the sound.
const maxItems = 1000

// listed reads items into a field, behind those that are there already: a flag
// may be repeated.
func listed[T any](field func(*simSpec) *string, kind itemKind[T]) func(*simSpec, string) error {
	return func(s *simSpec, text string) error {
		more, err := kind.list(text)
		if err != nil {
			return err
		}
		all := field(s)
		if *all != "" {
			*all += ","
		}
		*all += kind.text(more)
		if n := strings.Count(*all, ",") + 1; n > maxItems {
			return fmt.Errorf("%d of them: at most %d", n, maxItems)
		}
		return nil
	}
}

// list reads items with commas between.
func (k itemKind[T]) list(text string) (items []T, err error) {
	for item := range strings.SplitSeq(text, ",") {
		item = strings.TrimSpace(item)
		v, err := k.read(item)
		if err == errShape || err != nil && !itemLike(item) {
			return nil, fmt.Errorf("%s: must be %s", quoted(item), k.shape)
		}
		if err != nil {
			return nil, fmt.Errorf("in %s: %w", quoted(item), err)
		}
		items = append(items, v)
	}
	return items, nil
}

// itemLike tells a mistake in an item, where it helps to say which part is wrong,
// from what is nothing like one.
func itemLike(s string) bool {
	odd := func(r rune) bool {
		return !(r >= '0' && r <= '9' || r >= 'a' && r <= 'z' || r >= 'A' && r <= 'Z' || strings.ContainsRune("+-.:/ µ", r))
	}
	return len(s) <= 80 && strings.IndexFunc(s, odd) < 0
}

// text writes items so that list reads the same ones.
func (k itemKind[T]) text(items []T) string {
	var all []string
	for _, v := range items {
		all = append(all, k.write(v))
	}
	return strings.Join(all, ",")
}

// known reads the canonical text of a simSpec.
func (k itemKind[T]) known(text string) []T {
	if text == "" {
		return nil
	}
	items, err := k.list(text)
	if err != nil {
		panic("canonical text of a scene: " + err.Error()) // text wrote what list cannot read
	}
	return items
}

// errShape says that an item has not the parts it needs.
var errShape = fmt.Errorf("not of the shape asked for")

func readTrim(s string) (u sim.Turn, err error) {
	at, by, ok := strings.Cut(s, ":")
	if !ok {
		return u, errShape
	}
	by, over, slow := strings.Cut(by, "/")
	if u.At, err = parseSeconds(at); err != nil {
		return u, err
	}
	if u.By, err = parseHertz(by); err != nil || !slow {
		return u, err
	}
	u.Over, err = parseSeconds(over)
	return u, err
}

func writeTrim(u sim.Turn) string {
	s := exactly(u.At) + "s:" + exactly(u.By) + "Hz"
	if u.Over != 0 {
		s += "/" + exactly(u.Over) + "s"
	}
	return s
}

func readRetune(s string) (r sim.Step, err error) {
	at, by, ok := strings.Cut(s, ":")
	if !ok {
		return r, errShape
	}
	if r.At, err = parseSeconds(at); err != nil {
		return r, err
	}
	r.By, err = parseHertz(by)
	return r, err
}

func writeRetune(r sim.Step) string { return exactly(r.At) + "s:" + exactly(r.By) + "Hz" }

func readAway(s string) (a [2]float64, err error) {
	// The dash of an exponent, 1e-3s, is not the one between; a time's own
	// units hold none.
	dash := -1
	for i := 1; i < len(s) && dash < 0; i++ {
		if s[i] == '-' && s[i-1] != 'e' && s[i-1] != 'E' {
			dash = i
		}
	}
	if dash < 0 {
		return a, errShape
	}
	if a[0], err = parseSeconds(s[:dash]); err != nil {
		return a, err
	}
	if a[1], err = parseSeconds(s[dash+1:]); err != nil {
		return a, err
	}
	if a[0] >= a[1] {
		return a, fmt.Errorf("it ends before it begins: write the earlier time first")
	}
	return a, nil
}

func writeAway(a [2]float64) string { return exactly(a[0]) + "s-" + exactly(a[1]) + "s" }

func readSpur(s string) (p sim.Spur, err error) {
	hz, level, ok := strings.Cut(s, ":")
	if !ok {
		return p, errShape
	}
	if p.Hz, err = parseHertz(hz); err != nil {
		return p, err
	}
	p.DBFS, err = parseDecibel(level)
	return p, err
}

func writeSpur(p sim.Spur) string { return exactly(p.Hz) + "Hz:" + exactly(p.DBFS) + "dB" }

// exactly writes v so that it reads as the same number.
func exactly(v float64) string { return strconv.FormatFloat(v, 'g', -1, 64) }
