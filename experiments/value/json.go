package value

import (
	"strconv"
	"unicode/utf16"
	"unicode/utf8"
)

// Limits of what ParseJSON reads.
const (
	maxDepth = 64
	maxBytes = 16 << 20
)

// SyntaxError says what is wrong with a JSON text and where.
type SyntaxError struct {
	Pos     Pos
	Message string
}

func (e *SyntaxError) Error() string {
	return "line " + strconv.Itoa(e.Pos.Line) + ", column " + strconv.Itoa(e.Pos.Column) + ": " + e.Message
}

// ParseJSON reads one JSON text (RFC 8259), strictly: valid UTF-8, no key
// twice, numbers within the range of doubles, no lone surrogates, nesting up
// to 64, size up to 16 MiB. The error is a *SyntaxError.
func ParseJSON(text []byte) (Value, error) {
	p := parser{text: text, line: 1}
	if len(text) > maxBytes {
		return Value{}, p.fail("the text is larger than 16 MiB")
	}
	if !utf8.Valid(text) {
		return Value{}, p.fail("the text is not valid UTF-8")
	}
	p.space()
	v, err := p.value(0)
	if err != nil {
		return Value{}, err
	}
	p.space()
	if p.at < len(p.text) {
		return Value{}, p.fail("something follows the end of the value")
	}
	return v, nil
}

type parser struct {
	text  []byte
	at    int
	line  int
	start int // offset of the line's first byte
}

func (p *parser) pos() Pos { return Pos{Line: p.line, Column: p.at - p.start + 1} }

func (p *parser) fail(message string) error { return &SyntaxError{p.pos(), message} }

func (p *parser) peek() byte {
	if p.at < len(p.text) {
		return p.text[p.at]
	}
	return 0
}

func (p *parser) space() {
	for p.at < len(p.text) {
		switch p.text[p.at] {
		case '\n':
			p.line++
			p.start = p.at + 1
		case ' ', '\t', '\r':
		default:
			return
		}
		p.at++
	}
}

func (p *parser) value(depth int) (Value, error) {
	if depth > maxDepth {
		return Value{}, p.fail("nested deeper than 64")
	}
	pos, from := p.pos(), p.at
	v, err := p.bare(depth)
	if err != nil {
		return Value{}, err
	}
	v.Pos = pos
	if v.Kind < Sequence {
		v.Raw = string(p.text[from:p.at])
	}
	return v, nil
}

func (p *parser) bare(depth int) (Value, error) {
	switch c := p.peek(); {
	case c == '{':
		return p.object(depth)
	case c == '[':
		return p.array(depth)
	case c == '"':
		s, err := p.str()
		return String(s), err
	case c == '-' || c >= '0' && c <= '9':
		return p.number()
	case c == 't':
		return Bool(true), p.word("true")
	case c == 'f':
		return Bool(false), p.word("false")
	case c == 'n':
		return Value{}, p.word("null")
	case p.at >= len(p.text):
		return Value{}, p.fail("the text ends where a value should be")
	}
	return Value{}, p.fail("a value should be here")
}

func (p *parser) word(w string) error {
	if len(p.text)-p.at < len(w) || string(p.text[p.at:p.at+len(w)]) != w {
		return p.fail("a value should be here: did you mean " + w + "?")
	}
	p.at += len(w)
	return nil
}

func (p *parser) object(depth int) (Value, error) {
	v := Value{Kind: Mapping}
	var seen map[string]bool
	p.at++
	p.space()
	if p.peek() == '}' {
		p.at++
		return v, nil
	}
	for {
		pos := p.pos()
		if p.peek() != '"' {
			return v, p.fail("a key in double quotes should be here")
		}
		key, err := p.str()
		if err != nil {
			return v, err
		}
		if seen == nil {
			seen = make(map[string]bool)
		}
		if seen[key] {
			return v, &SyntaxError{pos, "the key " + strconv.Quote(key) + " stands twice"}
		}
		seen[key] = true
		p.space()
		if p.peek() != ':' {
			return v, p.fail("a colon should follow the key")
		}
		p.at++
		p.space()
		member, err := p.value(depth + 1)
		if err != nil {
			return v, err
		}
		v.Members = append(v.Members, Member{Key: key, KeyPos: pos, Value: member})
		done, err := p.next('}')
		if done || err != nil {
			return v, err
		}
	}
}

func (p *parser) array(depth int) (Value, error) {
	v := Value{Kind: Sequence}
	p.at++
	p.space()
	if p.peek() == ']' {
		p.at++
		return v, nil
	}
	for {
		item, err := p.value(depth + 1)
		if err != nil {
			return v, err
		}
		v.Items = append(v.Items, item)
		done, err := p.next(']')
		if done || err != nil {
			return v, err
		}
	}
}

// next steps over a comma, or over end, which closes the list.
func (p *parser) next(end byte) (done bool, err error) {
	p.space()
	switch p.peek() {
	case end:
		p.at++
		return true, nil
	case ',':
		p.at++
		p.space()
		return false, nil
	}
	return false, p.fail("a comma or " + string(rune(end)) + " should be here")
}

func (p *parser) number() (Value, error) {
	from := p.at
	digits := func() bool {
		any := false
		for c := p.peek(); c >= '0' && c <= '9'; c = p.peek() {
			p.at++
			any = true
		}
		return any
	}
	if p.peek() == '-' {
		p.at++
	}
	if p.peek() == '0' {
		p.at++
	} else if !digits() {
		return Value{}, p.fail("a digit should be here")
	}
	if p.peek() == '.' {
		p.at++
		if !digits() {
			return Value{}, p.fail("a digit should follow the decimal point")
		}
	}
	if c := p.peek(); c == 'e' || c == 'E' {
		p.at++
		if c := p.peek(); c == '+' || c == '-' {
			p.at++
		}
		if !digits() {
			return Value{}, p.fail("a digit should follow the exponent sign")
		}
	}
	x, err := strconv.ParseFloat(string(p.text[from:p.at]), 64)
	if err != nil {
		return Value{}, p.fail("the number is beyond the range of doubles")
	}
	return Number(x), nil
}

func (p *parser) str() (string, error) {
	p.at++
	from := p.at
	for p.at < len(p.text) && p.text[p.at] != '"' && p.text[p.at] != '\\' && p.text[p.at] >= 0x20 {
		p.at++
	}
	if p.peek() == '"' && p.at < len(p.text) {
		p.at++
		return string(p.text[from : p.at-1]), nil
	}
	out := append([]byte(nil), p.text[from:p.at]...)
	for p.at < len(p.text) {
		c := p.text[p.at]
		switch {
		case c == '"':
			p.at++
			return string(out), nil
		case c < 0x20:
			return "", p.fail("a control character must be written as an escape")
		case c != '\\':
			out = append(out, c)
			p.at++
		default:
			r, err := p.escape()
			if err != nil {
				return "", err
			}
			out = utf8.AppendRune(out, r)
		}
	}
	return "", p.fail("the text ends inside a string")
}

func (p *parser) escape() (rune, error) {
	p.at++
	c := p.peek()
	p.at++
	switch c {
	case '"', '\\', '/':
		return rune(c), nil
	case 'b':
		return '\b', nil
	case 'f':
		return '\f', nil
	case 'n':
		return '\n', nil
	case 'r':
		return '\r', nil
	case 't':
		return '\t', nil
	case 'u':
		return p.unicode()
	}
	p.at--
	return 0, p.fail("unknown escape in a string")
}

func (p *parser) unicode() (rune, error) {
	r, err := p.hex4()
	if err != nil || !utf16.IsSurrogate(r) {
		return r, err
	}
	if p.peek() != '\\' || p.at+1 >= len(p.text) || p.text[p.at+1] != 'u' {
		return 0, p.fail("half of a surrogate pair")
	}
	p.at += 2
	second, err := p.hex4()
	if err != nil {
		return 0, err
	}
	pair := utf16.DecodeRune(r, second)
	if pair == utf8.RuneError {
		return 0, p.fail("half of a surrogate pair")
	}
	return pair, nil
}

func (p *parser) hex4() (rune, error) {
	if len(p.text)-p.at < 4 {
		return 0, p.fail("four hexadecimal digits should be here")
	}
	x, err := strconv.ParseUint(string(p.text[p.at:p.at+4]), 16, 16)
	if err != nil {
		return 0, p.fail("four hexadecimal digits should be here")
	}
	p.at += 4
	return rune(x), nil
}
