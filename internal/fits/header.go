package fits

import (
	"fmt"
	"math"
	"strconv"
	"strings"
)

const (
	blockSize = 2880 // bytes of a FITS block
	cardSize  = 80   // bytes of a header card
)

// Card is one keyword of a header. Value is a bool, int64, float64, string or
// complex128, or nil when the card has no value. For COMMENT, HISTORY and
// blank keywords Value is nil and Comment holds the text. Key is upper case; a
// long one of the HIERARCH convention stands without that prefix, its words
// separated by one space.
type Card struct {
	Key     string
	Value   any
	Comment string
}

func (c Card) commentary() bool { return c.Key == "COMMENT" || c.Key == "HISTORY" || c.Key == "" }

// Header is a list of cards in order. The zero value is an empty header. Of
// cards with the same keyword the first is found. Reading from several
// goroutines is safe while none writes.
type Header struct {
	cards    []Card
	index    map[string]int
	warnings []string
}

// normalKey gives the form under which a keyword is stored.
func normalKey(key string) string {
	key = strings.Join(strings.Fields(strings.ToUpper(key)), " ")
	return strings.TrimPrefix(key, "HIERARCH ")
}

// Len returns the number of cards.
func (h *Header) Len() int {
	if h == nil {
		return 0
	}
	return len(h.cards)
}

// Cards returns all cards in order. The slice belongs to the header.
func (h *Header) Cards() []Card {
	if h == nil {
		return nil
	}
	return h.cards
}

// Warnings lists what was malformed in the header as read, and how it was
// understood.
func (h *Header) Warnings() []string {
	if h == nil {
		return nil
	}
	return h.warnings
}

const maxWarnings = 100

func (h *Header) warn(format string, args ...any) {
	if len(h.warnings) < maxWarnings {
		h.warnings = append(h.warnings, fmt.Sprintf(format, args...))
	}
}

// Clone returns a copy that shares nothing.
func (h *Header) Clone() *Header {
	c := &Header{}
	for _, card := range h.Cards() {
		c.Add(card)
	}
	c.warnings = append(c.warnings, h.Warnings()...)
	return c
}

// Get returns the first card with a keyword.
func (h *Header) Get(key string) (Card, bool) {
	if h == nil {
		return Card{}, false
	}
	i, ok := h.index[key]
	if !ok {
		if i, ok = h.index[normalKey(key)]; !ok {
			return Card{}, false
		}
	}
	return h.cards[i], true
}

// Has reports whether a keyword is there, with or without a value.
func (h *Header) Has(key string) bool {
	_, ok := h.Get(key)
	return ok
}

// Float returns a keyword's number. A string that holds a number counts, as
// some cameras quote theirs. The result is always finite.
func (h *Header) Float(key string) (float64, bool) {
	c, _ := h.Get(key)
	switch v := c.Value.(type) {
	case int64:
		return float64(v), true
	case float64:
		return v, true
	case string:
		switch n := parseNumber(strings.TrimSpace(v)).(type) {
		case int64:
			return float64(n), true
		case float64:
			return n, true
		}
	}
	return 0, false
}

// Int returns a keyword's whole number. A float without fraction counts.
func (h *Header) Int(key string) (int64, bool) {
	c, _ := h.Get(key)
	switch v := c.Value.(type) {
	case int64:
		return v, true
	case float64:
		if v == math.Trunc(v) && math.Abs(v) < 1<<53 {
			return int64(v), true
		}
	}
	return 0, false
}

// Str returns a keyword's string. Numbers are not strings: see Text.
func (h *Header) Str(key string) (string, bool) {
	c, _ := h.Get(key)
	v, ok := c.Value.(string)
	return v, ok
}

// Text returns a keyword's value as text, whatever its type.
func (h *Header) Text(key string) (string, bool) {
	c, _ := h.Get(key)
	switch v := c.Value.(type) {
	case nil:
		return "", false
	case string:
		return v, true
	}
	return formatValue(c.Value), true
}

// Bool returns a keyword's logical value.
func (h *Header) Bool(key string) (value, ok bool) {
	c, _ := h.Get(key)
	value, ok = c.Value.(bool)
	return value, ok
}

// Set replaces the first card with this keyword, or appends one. Value may be
// a bool, any integer or float, a string, a complex128 or nil; NaN and
// infinities, which FITS cannot hold, become nil, and cards with nil are left out
// of written files: what is unknown is absent. Another type panics.
func (h *Header) Set(key string, value any, comment string) {
	c := Card{Key: normalKey(key), Value: normalValue(value), Comment: comment}
	if i, ok := h.index[c.Key]; ok {
		h.cards[i] = c
		return
	}
	h.add(c)
}

// Add appends a card, even when its keyword is there already. It panics as Set
// does.
func (h *Header) Add(c Card) {
	c.Key, c.Value = normalKey(c.Key), normalValue(c.Value)
	h.add(c)
}

func (h *Header) add(c Card) {
	if h.index == nil {
		h.index = make(map[string]int)
	}
	if _, ok := h.index[c.Key]; !ok && !c.commentary() {
		h.index[c.Key] = len(h.cards)
	}
	h.cards = append(h.cards, c)
}

// AddHistory appends HISTORY cards; long text is wrapped when written.
func (h *Header) AddHistory(text string) { h.add(Card{Key: "HISTORY", Comment: text}) }

// AddComment appends COMMENT cards; long text is wrapped when written.
func (h *Header) AddComment(text string) { h.add(Card{Key: "COMMENT", Comment: text}) }

// Delete removes all cards with a keyword.
func (h *Header) Delete(key string) {
	key = normalKey(key)
	old := h.cards
	h.cards, h.index = nil, nil
	for _, c := range old {
		if c.Key != key {
			h.add(c)
		}
	}
}

func normalValue(value any) any {
	switch v := value.(type) {
	case nil, bool, int64, string:
		return v
	case complex128:
		if sum := real(v) + imag(v); math.IsNaN(sum) || math.IsInf(sum, 0) {
			return nil
		}
		return v
	case float64:
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return nil
		}
		return v
	case float32:
		if f := float64(v); math.IsNaN(f) || math.IsInf(f, 0) {
			return nil
		}
		// The shortest decimal that gives v back, not v's binary tail.
		f, _ := strconv.ParseFloat(strconv.FormatFloat(float64(v), 'g', -1, 32), 64)
		return f
	case int:
		return int64(v)
	case int32:
		return int64(v)
	case int16:
		return int64(v)
	case int8:
		return int64(v)
	case uint8:
		return int64(v)
	case uint16:
		return int64(v)
	case uint32:
		return int64(v)
	case uint:
		return normalValue(uint64(v))
	case uint64:
		if v > math.MaxInt64 {
			return float64(v)
		}
		return int64(v)
	}
	panic(fmt.Sprintf("fits: a header card cannot hold a %T", value))
}

// parseHeader reads the cards of one header, without the END card. It never
// fails: what is malformed becomes a warning. len(raw) is a multiple of 80.
func parseHeader(raw []byte) *Header {
	h := &Header{index: make(map[string]int, len(raw)/cardSize)}
	for n := 0; (n+1)*cardSize <= len(raw); n++ {
		h.parseCard(raw[n*cardSize:(n+1)*cardSize], n+1)
	}
	return h
}

func (h *Header) parseCard(raw []byte, n int) {
	line := string(raw)
	for _, b := range raw {
		if b < 32 || b > 126 {
			h.warn("card %d: holds a byte outside printable ASCII: read as '?'", n)
			clean := []byte(line)
			for i, b := range clean {
				if b < 32 || b > 126 {
					clean[i] = '?'
				}
			}
			line = string(clean)
			break
		}
	}
	key := strings.TrimRight(line[:8], " ")
	switch key {
	case "":
		// A blank keyword is commentary; wholly blank cards are kept, as they
		// part a header's sections.
		h.add(Card{Comment: strings.TrimRight(line[8:], " ")})
		return
	case "COMMENT", "HISTORY":
		h.add(Card{Key: key, Comment: strings.TrimRight(line[8:], " ")})
		return
	case "CONTINUE":
		h.continueString(line, n)
		return
	}
	rest := line[8:]
	if key == "HIERARCH" && rest[0] == ' ' {
		eq := strings.IndexByte(rest, '=')
		if eq < 0 {
			h.add(Card{Key: key, Comment: strings.TrimSpace(rest)})
			return
		}
		key, rest = normalKey(rest[:eq]), rest[eq+1:]
		switch key {
		case "", "COMMENT", "HISTORY", "CONTINUE", "END":
			h.warn("card %d: HIERARCH with the keyword %q: ignored", n, key)
			return
		}
	} else {
		if k := strings.ToUpper(strings.TrimSpace(key)); k != key {
			h.warn("card %d: keyword %q is not upper case at the left: read as %s", n, key, k)
			key = k
		}
		if strings.ContainsFunc(key, func(r rune) bool { return !keyRune(r) }) {
			h.warn("card %d: keyword %q holds characters outside A-Z, 0-9, - and _", n, key)
			key = strings.Join(strings.Fields(key), "_")
		}
		if rest[0] != '=' {
			// No value indicator: the rest is a comment.
			if key == "HIERARCH" || key == "CONTINUE" || key == "COMMENT" || key == "HISTORY" {
				h.warn("card %d: %s stands at the wrong place: ignored", n, key)
				return
			}
			h.add(Card{Key: key, Comment: strings.TrimSpace(rest)})
			return
		}
		if rest[1] != ' ' {
			h.warn("card %d: %s has no space after the '='", n, key)
		}
		rest = rest[1:]
	}
	value, comment, problem := parseValue(rest)
	if problem != "" {
		h.warn("card %d: %s: %s", n, key, problem)
	}
	if _, ok := h.index[key]; ok {
		h.warn("card %d: %s is there more than once: the first one counts", n, key)
	}
	h.add(Card{Key: key, Value: value, Comment: comment})
}

func keyRune(r rune) bool {
	return r >= 'A' && r <= 'Z' || r >= '0' && r <= '9' || r == '-' || r == '_'
}

// continueString joins a CONTINUE card to the long string before it.
func (h *Header) continueString(line string, n int) {
	if len(h.cards) > 0 {
		last := &h.cards[len(h.cards)-1]
		if s, ok := last.Value.(string); ok && strings.HasSuffix(s, "&") {
			value, comment, problem := parseValue(line[8:])
			if more, ok := value.(string); ok && problem == "" {
				last.Value = s[:len(s)-1] + more
				if comment != "" {
					last.Comment = strings.TrimSpace(last.Comment + " " + comment)
				}
				return
			}
		}
	}
	h.warn("card %d: CONTINUE does not follow a string that ends with '&': ignored", n)
}

// parseValue splits the text after the value indicator into value and comment.
// A value that is none of FITS's forms is returned as a string with a word on
// what is wrong.
func parseValue(s string) (value any, comment, problem string) {
	s = strings.Trim(s, " ")
	if s == "" {
		return nil, "", ""
	}
	if s[0] == '\'' {
		var text strings.Builder
		i, closed := 1, false
		for i < len(s) {
			if s[i] != '\'' {
				text.WriteByte(s[i])
				i++
				continue
			}
			if i+1 < len(s) && s[i+1] == '\'' {
				text.WriteByte('\'')
				i += 2
				continue
			}
			closed = true
			i++
			break
		}
		value = strings.TrimRight(text.String(), " ")
		if !closed {
			return value, "", "the string has no closing quote"
		}
		rest := strings.TrimLeft(s[i:], " ")
		if rest != "" && rest[0] != '/' {
			return value, "", fmt.Sprintf("%q follows the string without a '/'", rest)
		}
		return value, strings.TrimSpace(strings.TrimPrefix(rest, "/")), ""
	}
	token := s
	if i := strings.IndexByte(s, '/'); i >= 0 {
		token, comment = strings.TrimRight(s[:i], " "), strings.TrimSpace(s[i+1:])
	}
	switch {
	case token == "":
		return nil, comment, ""
	case token == "T":
		return true, comment, ""
	case token == "F":
		return false, comment, ""
	case token[0] == '(':
		inner, ok := strings.CutSuffix(token[1:], ")")
		re, im, both := strings.Cut(inner, ",")
		if ok && both {
			a, okA := toFloat(parseNumber(strings.TrimSpace(re)))
			b, okB := toFloat(parseNumber(strings.TrimSpace(im)))
			if okA && okB {
				return complex(a, b), comment, ""
			}
		}
	default:
		if v := parseNumber(token); v != nil {
			return v, comment, ""
		}
	}
	return token, comment, fmt.Sprintf("%q is no FITS value: read as a string", token)
}

// parseNumber returns an int64 or a finite float64, or nil. An integer beyond
// int64 (BZERO of unsigned 64-bit images) becomes a float64.
func parseNumber(s string) any {
	if s == "" || len(s) > 72 {
		return nil
	}
	integer, digit := true, false
	for i := 0; i < len(s); i++ {
		switch c := s[i]; {
		case c >= '0' && c <= '9':
			digit = true
		case c == '+' || c == '-':
		case c == '.' || c == 'E' || c == 'D' || c == 'e' || c == 'd':
			integer = false
		default:
			return nil
		}
	}
	if !digit {
		return nil
	}
	if integer {
		if v, err := strconv.ParseInt(s, 10, 64); err == nil {
			return v
		}
	} else {
		s = strings.NewReplacer("D", "E", "d", "E").Replace(s)
	}
	if v, err := strconv.ParseFloat(s, 64); err == nil {
		return v
	}
	return nil
}

func toFloat(v any) (float64, bool) {
	switch v := v.(type) {
	case int64:
		return float64(v), true
	case float64:
		return v, true
	}
	return 0, false
}

// formatValue writes any value but a string.
func formatValue(value any) string {
	switch v := value.(type) {
	case bool:
		if v {
			return "T"
		}
		return "F"
	case int64:
		return strconv.FormatInt(v, 10)
	case float64:
		return formatFloat(v)
	case complex128:
		return "(" + formatFloat(real(v)) + ", " + formatFloat(imag(v)) + ")"
	}
	return ""
}

// formatFloat gives the shortest decimal that reads back as v, always with a
// decimal point.
func formatFloat(v float64) string {
	s := strconv.FormatFloat(v, 'G', -1, 64)
	if strings.ContainsRune(s, '.') {
		return s
	}
	if i := strings.IndexByte(s, 'E'); i >= 0 {
		return s[:i] + ".0" + s[i:]
	}
	return s + ".0"
}

// ascii replaces what a header cannot hold.
func ascii(s string) string {
	for i := 0; i < len(s); i++ {
		if s[i] < 32 || s[i] > 126 {
			return strings.Map(func(r rune) rune {
				if r < 32 || r > 126 {
					return '?'
				}
				return r
			}, s)
		}
	}
	return s
}

// appendCard writes one card as one or more lines of 80 bytes. long tells that
// the CONTINUE convention was used.
func appendCard(dst []byte, c Card) (out []byte, long bool, err error) {
	comment := ascii(c.Comment)
	if c.commentary() {
		for {
			n := min(len(comment), cardSize-8)
			dst = appendLine(dst, fmt.Sprintf("%-8s%s", c.Key, comment[:n]))
			if comment = comment[n:]; comment == "" {
				return dst, false, nil
			}
		}
	}
	lead := fmt.Sprintf("%-8s", c.Key)
	if len(c.Key) > 8 || strings.ContainsFunc(c.Key, func(r rune) bool { return !keyRune(r) }) {
		if key := ascii(c.Key); key != c.Key || strings.ContainsAny(key, "='/") || len(key) > 45 {
			return dst, false, fmt.Errorf("keyword %q cannot be written: want up to 45 printable ASCII characters without = ' or /", c.Key)
		}
		lead = "HIERARCH " + c.Key + " "
	}
	if c.Value == nil {
		line := lead + "="
		if len(lead) == 8 {
			line = lead + "= "
		}
		if comment != "" {
			line += " / " + comment
		}
		return appendLine(dst, line), false, nil
	}
	lead += "= "
	text, isString := c.Value.(string)
	if !isString {
		line := lead + fmt.Sprintf("%20s", formatValue(c.Value))
		if comment != "" {
			line += " / " + comment
		}
		if len(lead) > 10 {
			line = lead + formatValue(c.Value)
			if comment != "" {
				line += " / " + comment
			}
		}
		return appendLine(dst, line), false, nil
	}
	text = strings.TrimRight(ascii(text), " ")
	quoted := strings.ReplaceAll(text, "'", "''")
	if len(lead)+len(quoted)+2 <= cardSize {
		line := lead + fmt.Sprintf("%-20s", fmt.Sprintf("'%-8s'", quoted))
		if len(lead) > 10 || len(line) > cardSize {
			line = lead + "'" + quoted + "'"
		}
		if comment != "" {
			line += " / " + comment
		}
		return appendLine(dst, line), false, nil
	}
	for {
		room := cardSize - len(lead) - 2
		if len(quoted) <= room {
			line := lead + "'" + quoted + "'"
			if comment != "" {
				line += " / " + comment
			}
			return appendLine(dst, line), true, nil
		}
		cut := room - 1 // the '&' takes one
		if quoted[cut-1] == '\'' && (countTail(quoted[:cut], '\'')%2 == 1) {
			cut-- // never between the two halves of a quote
		}
		for quoted[cut-1] == ' ' && cut > 1 {
			cut-- // readers may drop blanks before the '&'
		}
		dst = appendLine(dst, lead+"'"+quoted[:cut]+"&'")
		quoted, lead = quoted[cut:], "CONTINUE  "
	}
}

// countTail counts how often b stands at the end of s.
func countTail(s string, b byte) int {
	n := 0
	for n < len(s) && s[len(s)-1-n] == b {
		n++
	}
	return n
}

// appendLine pads or cuts a line to 80 bytes. Only comments are long enough to
// be cut.
func appendLine(dst []byte, line string) []byte {
	if len(line) > cardSize {
		line = line[:cardSize]
	}
	dst = append(dst, line...)
	for n := len(line); n < cardSize; n++ {
		dst = append(dst, ' ')
	}
	return dst
}
