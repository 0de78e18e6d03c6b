package study

import "strings"

// keyNames are the keys that can give an answer: KeyboardEvent.code values of
// W3C UI Events KeyboardEvent code Values (2017), besides letters and digits.
// Tab, Escape and the keys of menus and windows are kept for the browser.
var keyNames = []string{
	"ArrowLeft", "ArrowRight", "ArrowUp", "ArrowDown", "Space", "Enter", "Backspace",
	"ShiftLeft", "ShiftRight", "ControlLeft", "ControlRight", "AltLeft", "AltRight",
	"Comma", "Period", "Slash", "Semicolon", "Quote", "BracketLeft", "BracketRight", "Backslash",
	"Minus", "Equal", "Backquote", "IntlBackslash",
	"NumpadEnter", "NumpadAdd", "NumpadSubtract", "NumpadMultiply", "NumpadDivide", "NumpadDecimal",
	"Home", "End", "PageUp", "PageDown", "Insert", "Delete",
}

// checkKey says what is wrong with the name of a key, "" if nothing.
func checkKey(k string) string {
	if k == "Escape" { // reported as taken
		return ""
	}
	for _, prefix := range []string{"Key", "Digit", "Numpad"} {
		rest, ok := strings.CutPrefix(k, prefix)
		if !ok || len(rest) != 1 {
			continue
		}
		digit := rest[0] >= '0' && rest[0] <= '9'
		letter := rest[0] >= 'A' && rest[0] <= 'Z'
		if digit && prefix != "Key" || letter && prefix == "Key" {
			return ""
		}
	}
	if contains(keyNames, k) {
		return ""
	}
	return "no keyboard has a key called " + quote(k) + ": " + likelyKey(k)
}

func likelyKey(k string) string {
	if len(k) == 1 {
		switch c := k[0]; {
		case c >= '0' && c <= '9':
			return "did you mean Digit" + k + "?"
		case c >= 'a' && c <= 'z' || c >= 'A' && c <= 'Z':
			return "did you mean Key" + strings.ToUpper(k) + "?"
		}
	}
	for _, way := range []string{"Left", "Right", "Up", "Down"} { // the usual other order
		if strings.EqualFold(k, way+"Arrow") || strings.EqualFold(k, way) {
			return "did you mean Arrow" + way + "?"
		}
	}
	if near := nearest(k, keyNames); near != "" {
		return "did you mean " + near + "?"
	}
	return "names are those of KeyboardEvent.code, e.g. ArrowLeft, KeyF, Digit1, Space"
}
