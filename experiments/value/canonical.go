package value

import (
	"errors"
	"math"
	"slices"
	"strconv"
	"unicode/utf16"
	"unicode/utf8"
)

// Errors of Canonical.
var (
	ErrNotFinite = errors.New("a number is not finite: JSON cannot hold it")
	ErrNotUTF8   = errors.New("a text is not valid UTF-8")
	ErrTwice     = errors.New("a key stands twice in one object")
)

// Canonical writes v in the JSON Canonicalization Scheme (RFC 8785): no white
// space, members sorted by UTF-16 code units, numbers as ECMAScript prints them.
func Canonical(v Value) ([]byte, error) { return appendValue(nil, v) }

func appendValue(out []byte, v Value) ([]byte, error) {
	switch v.Kind {
	case Boolean:
		return strconv.AppendBool(out, v.Bool), nil
	case Numeric:
		return AppendNumber(out, v.Num)
	case Text:
		return appendString(out, v.Str)
	case Sequence:
		return appendSequence(out, v.Items)
	case Mapping:
		return appendMapping(out, v.Members)
	}
	return append(out, "null"...), nil
}

func appendSequence(out []byte, items []Value) ([]byte, error) {
	out = append(out, '[')
	for i := range items {
		if i > 0 {
			out = append(out, ',')
		}
		var err error
		if out, err = appendValue(out, items[i]); err != nil {
			return nil, err
		}
	}
	return append(out, ']'), nil
}

func appendMapping(out []byte, members []Member) ([]byte, error) {
	sorted := slices.Clone(members)
	slices.SortStableFunc(sorted, func(a, b Member) int { return compareUTF16(a.Key, b.Key) })
	out = append(out, '{')
	for i := range sorted {
		if i > 0 {
			if sorted[i].Key == sorted[i-1].Key {
				return nil, ErrTwice
			}
			out = append(out, ',')
		}
		var err error
		if out, err = appendString(out, sorted[i].Key); err != nil {
			return nil, err
		}
		out = append(out, ':')
		if out, err = appendValue(out, sorted[i].Value); err != nil {
			return nil, err
		}
	}
	return append(out, '}'), nil
}

// compareUTF16 orders by UTF-16 code units, which differs from code points
// where surrogates meet U+E000 to U+FFFF.
func compareUTF16(a, b string) int {
	return slices.Compare(utf16.Encode([]rune(a)), utf16.Encode([]rune(b)))
}

// AppendNumber appends x as ECMAScript's Number::toString writes it (ECMA-262,
// used by RFC 8785 section 3.2.2.3): the shortest digits that read back as x.
func AppendNumber(out []byte, x float64) ([]byte, error) {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return nil, ErrNotFinite
	}
	if x == 0 {
		return append(out, '0'), nil
	}
	if a := math.Abs(x); a >= 1e-6 && a < 1e21 {
		return strconv.AppendFloat(out, x, 'f', -1, 64), nil
	}
	from := len(out)
	out = strconv.AppendFloat(out, x, 'e', -1, 64)
	// Go pads the exponent to two digits, ECMAScript does not.
	for i := from; i+2 < len(out); i++ {
		if out[i] == 'e' && out[i+2] == '0' {
			return append(out[:i+2], out[i+3:]...), nil
		}
	}
	return out, nil
}

func appendString(out []byte, s string) ([]byte, error) {
	if !utf8.ValidString(s) {
		return nil, ErrNotUTF8
	}
	const hex = "0123456789abcdef"
	out = append(out, '"')
	for i := 0; i < len(s); i++ {
		switch c := s[i]; c {
		case '"', '\\':
			out = append(out, '\\', c)
		case '\b':
			out = append(out, '\\', 'b')
		case '\t':
			out = append(out, '\\', 't')
		case '\n':
			out = append(out, '\\', 'n')
		case '\f':
			out = append(out, '\\', 'f')
		case '\r':
			out = append(out, '\\', 'r')
		default:
			if c < 0x20 {
				out = append(out, '\\', 'u', '0', '0', hex[c>>4], hex[c&15])
			} else {
				out = append(out, c)
			}
		}
	}
	return append(out, '"'), nil
}
