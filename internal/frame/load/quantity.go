package load

import (
	"fmt"
	"regexp"
	"strconv"
	"strings"

	"nightsift/internal/fits"
)

// quantity is a number as a card gives it, with what the card says beside it:
// the rest of a text such as "2.1 e-/ADU", and the comment.
type quantity struct {
	value float64
	unit  string // lower case: the rest of the text, a blank, the comment
	note  string // how the number was read, when that needed a guess
}

var numberText = regexp.MustCompile(`^([+-]?(?:\d+[.,]?\d*|[.,]\d+)(?:[eEdD][+-]?\d+)?)\s*(.*)$`)

// readQuantity reads a card's number. Text that begins with a number counts,
// also with a decimal comma; a comma before exactly three digits parts
// thousands where thousands is set. The error says what is there instead.
func readQuantity(c fits.Card, thousands bool) (quantity, error) {
	q := quantity{unit: strings.ToLower(c.Comment)}
	switch v := c.Value.(type) {
	case int64:
		q.value = float64(v)
		return q, nil
	case float64:
		q.value = v
		return q, nil
	case string:
		text := strings.TrimSpace(v)
		m := numberText.FindStringSubmatch(text)
		if m == nil || m[2] != "" && (m[2][0] == ',' || m[2][0] == '.' || m[2][0] == ':' || m[2][0] == '-' && !strings.HasPrefix(m[2], "- ")) {
			return q, fmt.Errorf("%q holds no number", text)
		}
		number := strings.NewReplacer("d", "e", "D", "e").Replace(m[1])
		if whole, part, comma := strings.Cut(number, ","); comma {
			if thousands && len(part) == 3 {
				number = whole + part
				q.note = fmt.Sprintf("%q read as %s", text, number)
			} else {
				number = whole + "." + part
				q.note = fmt.Sprintf("%q read with a decimal comma", text)
			}
		}
		value, err := strconv.ParseFloat(number, 64)
		if err != nil {
			return q, fmt.Errorf("%q holds no number", text)
		}
		q.value, q.unit = value, strings.TrimSpace(strings.ToLower(m[2])+" "+q.unit)
		return q, nil
	case nil:
		return q, fmt.Errorf("has no value")
	}
	return q, fmt.Errorf("%v is no number", c.Value)
}

// Words of units, as comments and texts spell them.
var (
	electronsPerCount = regexp.MustCompile(`(^|[^a-z])(e-?|el|elec|(photo-?)?electrons?)\s*(/|per)\s*(adu|dn|counts?|cts?)\b`)
	countsPerElectron = regexp.MustCompile(`(^|[^a-z])(adu|dn|counts?|cts?)\s*(/|per)\s*(e-?|el|elec|(photo-?)?electrons?|photons?)([^a-z]|$)`)
	cameraSetting     = regexp.MustCompile(`\b(db|decibels?|setting|index|iso)\b`)
	unitElectron      = regexp.MustCompile(`(^|[^a-z])(e-|e|el|(photo-?)?electrons?)([^a-z]|$)`)
	unitCount         = regexp.MustCompile(`(^|[^a-z])(adus?|dns?|counts?|cts?)([^a-z]|$)`)
	perSecond         = regexp.MustCompile(`(/\s*s(ec(ond)?s?)?\b|\bper\s+(1\s*)?s(ec(ond)?s?)?\b|\bs\s?(\^|\*\*)?\(?-1\)?|\bcps\b)`)
	milliseconds      = regexp.MustCompile(`\[ms\]|\bmilli-?sec|\bms\b`)
	minutes           = regexp.MustCompile(`\[min\]|\bminutes?\b`)
)

// PixelUnit is what the pixels of a frame count.
type PixelUnit int

// The units that are told apart.
const (
	Counts     PixelUnit = iota // also when nothing is said
	Electrons                   // converted by the camera's gain
	OtherUnits                  // a flux, a magnitude
)

// pixelUnit understands BUNIT.
func pixelUnit(text string) (unit PixelUnit, rate bool) {
	s := strings.ToLower(strings.TrimSpace(text))
	rate = perSecond.MatchString(s)
	switch {
	case s == "":
		return Counts, false
	case countsPerElectron.MatchString(s):
		return OtherUnits, rate
	case unitElectron.MatchString(s):
		return Electrons, rate
	case unitCount.MatchString(s) || s == "cps" || s == "du" || strings.HasPrefix(s, "data number"):
		return Counts, rate
	}
	return OtherUnits, rate
}
