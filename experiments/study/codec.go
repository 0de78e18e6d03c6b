package study

import (
	"math"
	"strconv"
	"strings"

	"distal/experiments/value"
)

// codec walks one mapping of a study. The same walk reads it (strictly, with
// all problems), writes its canonical form, or describes it for the schema: a
// key stands in one place only.
type codec struct {
	mode     mode
	in       value.Value // reading: the mapping
	path     string
	keyPos   value.Pos // reading: where the mapping's own key stands
	key      string    // and what it is
	known    []string  // keys that the walk asked for
	missing  []string  // required keys that are not there
	out      []value.Member
	problems *Problems
	schema   *Schema
	language string // default language of plain sentences
}

type mode uint8

const (
	reading mode = iota
	writing
	describing
)

// num describes a number in a study file.
type num struct {
	Min, Max float64
	Default  float64
	Required bool
	Whole    bool
	Beyond   string // message above Max, "" for the usual one
}

// word describes a text in a study file.
type word struct {
	Required  bool
	Default   string
	MaxLength int                         // 0: 200
	Check     func(s string) (bad string) // what is wrong, "" if nothing
}

func (c *codec) at(key string) string {
	if c.path == "" {
		return key
	}
	return c.path + "." + key
}

// problem reports something about the value v under key.
func (c *codec) problem(key string, v value.Value, message string) {
	offending := v.Raw
	pos := v.Pos
	if pos.Line == 0 {
		pos = c.in.Pos
	}
	*c.problems = append(*c.problems, Problem{Pos: pos, Path: c.at(key), Offending: offending, Message: message})
}

// take gives the value under key when reading.
func (c *codec) take(key string, required bool) (value.Value, bool) {
	c.known = append(c.known, key)
	v, ok := c.in.Get(key)
	if ok && v.Kind == value.Null {
		ok = false
	}
	if !ok && required {
		c.missing = append(c.missing, key)
	}
	return v, ok
}

func (c *codec) put(key string, v value.Value) {
	c.out = append(c.out, value.Member{Key: key, Value: v})
}

// number walks a number.
func (c *codec) number(key string, x *float64, rule num, doc string) {
	switch c.mode {
	case writing:
		c.put(key, value.Number(*x))
	case describing:
		c.schema.number(key, rule, doc)
	case reading:
		*x = rule.Default
		if v, ok := c.take(key, rule.Required); ok {
			c.readNumber(key, v, x, rule)
		}
	}
}

func (c *codec) readNumber(key string, v value.Value, x *float64, rule num) {
	if checking && v.Kind == value.Text {
		if n, unit, ok := quantityText(v.Str); ok {
			c.problem(key, v, "a plain number is expected, the unit is in the key: write "+key+": "+n+" (if "+unit+" is that unit)")
			return
		}
	}
	switch {
	case v.Kind != value.Numeric:
		c.problem(key, v, "a number is expected, not "+value.KindNames[v.Kind])
	case rule.Whole && v.Num != math.Floor(v.Num):
		c.problem(key, v, "a whole number is expected")
	case v.Num > rule.Max && rule.Beyond != "":
		c.problem(key, v, rule.Beyond)
	case v.Num < rule.Min || v.Num > rule.Max || math.IsNaN(v.Num):
		c.problem(key, v, formatNumber(v.Num)+" is out of range: it must be "+rangeText(rule.Min, rule.Max))
	default:
		*x = v.Num
	}
}

func rangeText(low, high float64) string {
	switch {
	case math.IsInf(low, -1) && math.IsInf(high, 1):
		return "any number"
	case math.IsInf(high, 1):
		return formatNumber(low) + " or more"
	case math.IsInf(low, -1):
		return formatNumber(high) + " or less"
	}
	return "from " + formatNumber(low) + " to " + formatNumber(high)
}

// whole walks a whole number.
func (c *codec) whole(key string, n *int, rule num, doc string) {
	rule.Whole = true
	x := float64(*n)
	c.number(key, &x, rule, doc)
	if c.mode == reading {
		*n = int(x)
	}
}

// text walks a text.
func (c *codec) text(key string, s *string, rule word, doc string) {
	switch c.mode {
	case writing:
		c.put(key, value.String(*s))
	case describing:
		c.schema.text(key, rule, doc)
	case reading:
		*s = rule.Default
		if v, ok := c.take(key, rule.Required); ok {
			c.readText(key, v, s, rule)
		}
	}
}

func (c *codec) readText(key string, v value.Value, s *string, rule word) {
	if v.Kind != value.Text {
		c.problem(key, v, "text is expected, not "+value.KindNames[v.Kind]+" (put it in quotes if it is meant as text)")
		return
	}
	limit := rule.MaxLength
	if limit == 0 {
		limit = 200
	}
	if len(v.Str) > limit {
		c.problem(key, v, "the text has "+strconv.Itoa(len(v.Str))+" bytes: at most "+strconv.Itoa(limit)+" are allowed")
		return
	}
	if rule.Required && strings.TrimSpace(v.Str) == "" {
		c.problem(key, v, "it must not be empty")
		return
	}
	if rule.Check != nil && v.Str != "" {
		if bad := rule.Check(v.Str); bad != "" {
			c.problem(key, v, bad)
			return
		}
	}
	*s = v.Str
}

// flag walks a boolean.
func (c *codec) flag(key string, b *bool, standard bool, doc string) {
	switch c.mode {
	case writing:
		c.put(key, value.Bool(*b))
	case describing:
		c.schema.flag(key, standard, doc)
	case reading:
		*b = standard
		if v, ok := c.take(key, false); ok {
			if v.Kind != value.Boolean {
				c.problem(key, v, "true or false is expected, not "+value.KindNames[v.Kind])
				return
			}
			*b = v.Bool
		}
	}
}

// oneOf walks a choice among names; n is the index.
func oneOf[T ~int](c *codec, key string, n *T, names []string, standard T, required bool, doc string) {
	switch c.mode {
	case writing:
		if int(*n) >= 0 && int(*n) < len(names) {
			c.put(key, value.String(names[*n]))
		}
	case describing:
		c.schema.choice(key, names, int(standard), required, doc)
	case reading:
		*n = standard
		if v, ok := c.take(key, required); ok {
			if i := c.index(key, v, names); i >= 0 {
				*n = T(i)
			}
		}
	}
}

// index finds the name in v, reporting what is not among names.
func (c *codec) index(key string, v value.Value, names []string) int {
	if v.Kind != value.Text {
		c.problem(key, v, "one of "+strings.Join(names, ", ")+" is expected, not "+value.KindNames[v.Kind])
		return -1
	}
	for i, n := range names {
		if n == v.Str {
			return i
		}
	}
	message := quote(v.Str) + " is not known: "
	if near := suggest(v.Str, names); near != "" {
		message += "did you mean " + near + "?"
	} else if len(names) == 0 {
		message += "there are none to choose from"
	} else {
		message += "it can be " + strings.Join(names, ", ")
	}
	c.problem(key, v, message)
	return -1
}

// suggest is nearest where problems are explained.
func suggest(word string, candidates []string) string {
	if !checking {
		return ""
	}
	return nearest(word, candidates)
}

func quote(s string) string { return strconv.Quote(s) }

// words walks a list of texts; what is wrong with one is what bad says, nil if nothing can be.
func (c *codec) words(key string, list *[]string, bad func(string) string, doc string) {
	switch c.mode {
	case writing:
		items := make([]value.Value, len(*list))
		for i, s := range *list {
			items[i] = value.String(s)
		}
		c.put(key, value.List(items...))
	case describing:
		c.schema.texts(key, doc)
	case reading:
		*list = nil
		v, ok := c.take(key, false)
		if !ok {
			return
		}
		for _, item := range c.items(key, v) {
			if item.Kind != value.Text {
				c.problem(key, item, "text is expected, not "+value.KindNames[item.Kind])
				continue
			}
			if bad != nil {
				if message := bad(item.Str); message != "" {
					c.problem(key, item, message)
					continue
				}
			}
			*list = append(*list, item.Str)
		}
	}
}

// numbers walks a list of numbers; a single number stands for a list of one.
func (c *codec) numbers(key string, list *[]float64, rule num, doc string) {
	switch c.mode {
	case writing:
		c.put(key, value.Numbers(*list))
	case describing:
		c.schema.numbers(key, rule, doc)
	case reading:
		*list = nil
		v, ok := c.take(key, rule.Required)
		if !ok {
			return
		}
		for _, item := range c.items(key, v) {
			x := math.NaN()
			c.readNumber(key, item, &x, rule)
			if !math.IsNaN(x) {
				*list = append(*list, x)
			}
		}
	}
}

// items gives the items of a list, or a single value as a list of one.
func (c *codec) items(key string, v value.Value) []value.Value {
	switch v.Kind {
	case value.Sequence:
		return v.Items
	case value.Mapping:
		c.problem(key, v, "a list is expected, not "+value.KindNames[v.Kind])
		return nil
	}
	return []value.Value{v}
}

// rare walks what is written only where it is not as usual: studies from before
// there was such a key keep their canonical form.
func (c *codec) rare(usual bool, walk func()) {
	if c.mode != writing || !usual {
		walk()
	}
}

// sub opens the mapping v under key for reading.
func (c *codec) sub(path, key string, keyPos value.Pos, v value.Value) *codec {
	return &codec{mode: c.mode, in: v, path: path, key: key, keyPos: keyPos, problems: c.problems, language: c.language}
}

// keyPosOf is the place of key in the mapping that is read.
func (c *codec) keyPosOf(key string) value.Pos {
	for i := range c.in.Members {
		if c.in.Members[i].Key == key {
			return c.in.Members[i].KeyPos
		}
	}
	return c.in.Pos
}

// group walks one mapping under key. Absent mappings are walked empty, so that defaults hold.
func (c *codec) group(key string, required bool, doc string, walk func(*codec)) {
	switch c.mode {
	case writing:
		inner := &codec{mode: writing}
		walk(inner)
		c.put(key, value.Object(inner.out...))
	case describing:
		inner := c.schema.group(key, required, doc)
		walk(&codec{mode: describing, schema: inner})
	case reading:
		v, ok := c.take(key, required)
		if ok && v.Kind != value.Mapping {
			c.problem(key, v, "a group of keys is expected, not "+value.KindNames[v.Kind])
			return
		}
		inner := c.sub(c.at(key), key, c.keyPosOf(key), v)
		if !ok {
			if required {
				return
			}
			inner.in = value.Value{Kind: value.Mapping, Pos: c.in.Pos}
		}
		walk(inner)
		inner.finish()
	}
}

// named walks a mapping from names to things, in the order written.
func named[T any](c *codec, key string, list *[]T, name func(*T) *string, required bool, doc string, walk func(*codec, *T)) {
	namedBy(c, key, list, name, checkIdentifier, required, doc, walk)
}

// namedBy is named with names of another form: bad says what is wrong with one.
func namedBy[T any](c *codec, key string, list *[]T, name func(*T) *string, bad func(string) string, required bool, doc string, walk func(*codec, *T)) {
	switch c.mode {
	case writing:
		members := make([]value.Member, len(*list))
		for i := range *list {
			inner := &codec{mode: writing}
			walk(inner, &(*list)[i])
			members[i] = value.Member{Key: *name(&(*list)[i]), Value: value.Object(inner.out...)}
		}
		// The order matters to some lists, and canonical members are sorted.
		order := make([]value.Value, len(*list))
		for i := range *list {
			order[i] = value.String(*name(&(*list)[i]))
		}
		c.put(key, value.Object(members...))
		c.put(key+"_order", value.List(order...))
	case describing:
		var t T
		walk(&codec{mode: describing, schema: c.schema.named(key, required, doc)}, &t)
	case reading:
		v, ok := c.take(key, required)
		members := c.inOrder(key, v.Members)
		if !ok {
			return
		}
		if v.Kind != value.Mapping {
			c.problem(key, v, "names with a group of keys each are expected, not "+value.KindNames[v.Kind])
			return
		}
		for _, m := range members {
			var t T
			*name(&t) = m.Key
			if message := bad(m.Key); message != "" {
				c.problem(key+"."+m.Key, value.Value{Pos: m.KeyPos, Raw: m.Key}, message)
			}
			inner := c.sub(c.at(key)+"."+m.Key, m.Key, m.KeyPos, m.Value)
			if m.Value.Kind != value.Mapping {
				c.problem(key+"."+m.Key, m.Value, "a group of keys is expected for "+m.Key+", not "+value.KindNames[m.Value.Kind])
				continue
			}
			walk(inner, &t)
			inner.finish()
			*list = append(*list, t)
		}
	}
}

// inOrder gives the members in the order that a canonical mapping has beside
// it, since canonical members are sorted, or else as they are written.
func (c *codec) inOrder(key string, members []value.Member) []value.Member {
	order, ok := c.take(key+"_order", false)
	if !ok {
		return members
	}
	sorted := make([]value.Member, 0, len(members))
	for _, item := range order.Items {
		for i := range members {
			if members[i].Key == item.Str && len(sorted) < len(members) {
				sorted = append(sorted, members[i])
				break
			}
		}
	}
	for i := range sorted {
		for j := range i {
			if sorted[i].Key == sorted[j].Key {
				sorted = nil
				break
			}
		}
		if sorted == nil {
			break
		}
	}
	if len(sorted) != len(members) || len(order.Items) != len(members) {
		c.problem(key+"_order", order, "it must name everything under "+key+" once; in a study file leave it out, the order is that of the text")
		return members
	}
	return sorted
}

// listed walks a list of mappings.
func listed[T any](c *codec, key string, list *[]T, required bool, doc string, walk func(*codec, *T)) {
	switch c.mode {
	case writing:
		items := make([]value.Value, len(*list))
		for i := range *list {
			inner := &codec{mode: writing}
			walk(inner, &(*list)[i])
			items[i] = value.Object(inner.out...)
		}
		c.put(key, value.List(items...))
	case describing:
		var t T
		walk(&codec{mode: describing, schema: c.schema.listed(key, required, doc)}, &t)
	case reading:
		v, ok := c.take(key, required)
		if !ok {
			return
		}
		if v.Kind != value.Sequence {
			c.problem(key, v, "a list (lines that begin with a hyphen) is expected, not "+value.KindNames[v.Kind])
			return
		}
		for i, item := range v.Items {
			path := c.at(key) + "[" + strconv.Itoa(i+1) + "]"
			if item.Kind != value.Mapping {
				c.problem(key, item, "a group of keys is expected, not "+value.KindNames[item.Kind])
				continue
			}
			var t T
			inner := c.sub(path, "", item.Pos, item)
			walk(inner, &t)
			inner.finish()
			*list = append(*list, t)
		}
	}
}

const maxLanguages = 100

// sentence walks a sentence that participants read: a text in the study's
// first language, or a text per language.
func (c *codec) sentence(key string, list *[]LocalText, required bool, doc string) {
	switch c.mode {
	case writing:
		members := make([]value.Member, len(*list))
		for i, t := range *list {
			members[i] = value.Member{Key: t.Language, Value: value.String(t.Text)}
		}
		c.put(key, value.Object(members...))
	case describing:
		c.schema.sentence(key, required, doc)
	case reading:
		*list = nil
		v, ok := c.take(key, required)
		switch {
		case !ok:
		case v.Kind == value.Text:
			*list = []LocalText{{Language: c.language, Text: v.Str}}
		case v.Kind == value.Mapping && len(v.Members) > maxLanguages:
			c.problem(key, v, "these are more languages than the "+strconv.Itoa(maxLanguages)+" that a study can have")
		case v.Kind == value.Mapping:
			for _, m := range v.Members {
				if m.Value.Kind != value.Text {
					c.problem(key, m.Value, "text is expected for language "+m.Key)
					continue
				}
				*list = append(*list, LocalText{Language: m.Key, Text: m.Value.Str})
			}
			sortBy(*list, func(t *LocalText) string { return t.Language })
		default:
			c.problem(key, v, "text, or a text for each language, is expected")
		}
	}
}

// finish reports the keys that nobody asked for and those that are missing.
// A missing key that an unknown one was meant to be is one problem, not two.
func (c *codec) finish() {
	if c.mode != reading {
		return
	}
	var meant []string
	for _, m := range c.in.Members {
		if contains(c.known, m.Key) {
			continue
		}
		message := "this key is not known here"
		if checking {
			var key string
			message, key = c.unknown(m)
			meant = append(meant, key)
		}
		*c.problems = append(*c.problems, Problem{Pos: m.KeyPos, Path: c.at(m.Key), Offending: m.Key, Message: message})
	}
	for _, key := range c.missing {
		if contains(meant, key) {
			continue
		}
		p := Problem{Pos: c.keyPos, Path: c.path, Offending: c.key, Message: "the key " + key + " is missing"}
		if p.Pos.Line == 0 {
			p.Pos = c.in.Pos
		}
		*c.problems = append(*c.problems, p)
	}
}

// unknown explains a key that nobody asked for, and says which was meant.
func (c *codec) unknown(m value.Member) (message, meant string) {
	if message, meant = wrongUnit(m.Key, c.known, m.Value.Num, m.Value.Kind == value.Numeric); message != "" {
		return message, meant
	}
	if meant = nearest(m.Key, c.visible()); meant != "" {
		return "this key is not known here: did you mean " + meant + "?", meant
	}
	return "this key is not known here: it can be " + strings.Join(c.visible(), ", "), ""
}

// sortBy sorts a short list by key, keeping equal ones in place. The sorting of
// the standard library would take 2 KB of the engine for each type.
func sortBy[T any](list []T, key func(*T) string) {
	for i := 1; i < len(list); i++ {
		for j := i; j > 0 && key(&list[j]) < key(&list[j-1]); j-- {
			list[j], list[j-1] = list[j-1], list[j]
		}
	}
}

// visible are the keys that people write.
func (c *codec) visible() []string {
	var keys []string
	for _, k := range c.known {
		if !strings.HasSuffix(k, "_order") {
			keys = append(keys, k)
		}
	}
	return keys
}

func contains(list []string, s string) bool {
	for _, x := range list {
		if x == s {
			return true
		}
	}
	return false
}

func checkIdentifier(s string) string {
	if len(s) == 0 || len(s) > 40 {
		return "a name has 1 to 40 characters"
	}
	for i := 0; i < len(s); i++ {
		c := s[i]
		if c >= 'a' && c <= 'z' || i > 0 && (c >= '0' && c <= '9' || c == '_' || c == '-') {
			continue
		}
		return "a name has lower-case letters, digits, hyphens and underscores and begins with a letter: " + quote(s) + " does not"
	}
	return ""
}
