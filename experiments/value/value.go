// Package value holds trees of JSON-like values with the places they were read
// from, a strict JSON reader and the canonical writer of RFC 8785. It uses no
// reflection, so that the browser's engine stays small.
package value

// Kind is what a Value is.
type Kind uint8

// Kinds of values.
const (
	Null Kind = iota
	Boolean
	Numeric
	Text
	Sequence
	Mapping
)

// KindNames are what the kinds are called in messages.
var KindNames = []string{"nothing", "true or false", "a number", "text", "a list", "a group of keys"}

// Value is one node of a tree.
type Value struct {
	Kind    Kind
	Bool    bool
	Num     float64
	Str     string
	Items   []Value  // of a Sequence
	Members []Member // of a Mapping, in the order written
	Pos     Pos
	Raw     string // as written, for messages; "" when made by a program
}

// Member is one key of a mapping.
type Member struct {
	Key    string
	KeyPos Pos
	Value  Value
}

// Pos is a place in a text, from 1; Line 0 means unknown.
type Pos struct {
	File   string
	Line   int
	Column int
}

// Bool makes a boolean.
func Bool(b bool) Value { return Value{Kind: Boolean, Bool: b} }

// Number makes a number.
func Number(x float64) Value { return Value{Kind: Numeric, Num: x} }

// String makes a text.
func String(s string) Value { return Value{Kind: Text, Str: s} }

// List makes a sequence.
func List(items ...Value) Value { return Value{Kind: Sequence, Items: items} }

// Object makes a mapping.
func Object(members ...Member) Value { return Value{Kind: Mapping, Members: members} }

// Get finds the value under key.
func (v Value) Get(key string) (Value, bool) {
	for i := range v.Members {
		if v.Members[i].Key == key {
			return v.Members[i].Value, true
		}
	}
	return Value{}, false
}

// Numbers makes a sequence of numbers.
func Numbers(list []float64) Value {
	v := Value{Kind: Sequence, Items: make([]Value, len(list))}
	for i, x := range list {
		v.Items[i] = Number(x)
	}
	return v
}
