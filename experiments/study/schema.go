//go:build !wasip1

package study

import (
	"math"

	"distal/experiments/display"
	"distal/experiments/value"
)

// Schema collects the JSON Schema of one group of keys.
type Schema struct {
	properties []value.Member
	required   []value.Value
	doc        string
	wrap       func(value.Value) value.Value // from the group's schema to the property's
	children   []child
}

type child struct {
	at     int
	schema *Schema
}

// text is a member with a text.
func text(key, s string) value.Member { return value.Member{Key: key, Value: value.String(s)} }

func (s *Schema) add(key string, required bool, doc string, members ...value.Member) {
	if doc != "" {
		members = append(members, text("description", doc))
	}
	s.properties = append(s.properties, value.Member{Key: key, Value: value.Object(members...)})
	if required {
		s.required = append(s.required, value.String(key))
	}
}

func numberMembers(rule num) []value.Member {
	kind := "number"
	if rule.Whole {
		kind = "integer"
	}
	members := []value.Member{text("type", kind)}
	if !math.IsInf(rule.Min, 0) {
		members = append(members, value.Member{Key: "minimum", Value: value.Number(rule.Min)})
	}
	if !math.IsInf(rule.Max, 0) {
		members = append(members, value.Member{Key: "maximum", Value: value.Number(rule.Max)})
	}
	if !rule.Required {
		members = append(members, value.Member{Key: "default", Value: value.Number(rule.Default)})
	}
	return members
}

func (s *Schema) number(key string, rule num, doc string) {
	s.add(key, rule.Required, doc, numberMembers(rule)...)
}

func (s *Schema) text(key string, rule word, doc string) {
	members := []value.Member{text("type", "string")}
	if rule.Required {
		members = append(members, value.Member{Key: "minLength", Value: value.Number(1)})
	} else {
		members = append(members, text("default", rule.Default))
	}
	s.add(key, rule.Required, doc, members...)
}

func (s *Schema) flag(key string, standard bool, doc string) {
	s.add(key, false, doc, text("type", "boolean"), value.Member{Key: "default", Value: value.Bool(standard)})
}

func (s *Schema) choice(key string, names []string, standard int, required bool, doc string) {
	options := make([]value.Value, len(names))
	for i, n := range names {
		options[i] = value.String(n)
	}
	members := []value.Member{{Key: "enum", Value: value.List(options...)}}
	if !required && standard >= 0 && standard < len(options) {
		members = append(members, value.Member{Key: "default", Value: options[standard]})
	}
	s.add(key, required, doc, members...)
}

// texts describes a list of texts, or one of them.
func (s *Schema) texts(key, doc string) {
	s.oneOrMore(key, false, doc, value.Object(text("type", "string")))
}

// numbers describes a list of numbers, or one of them.
func (s *Schema) numbers(key string, rule num, doc string) {
	item := rule
	item.Required = true // no default of its own
	s.oneOrMore(key, rule.Required, doc, value.Object(numberMembers(item)...))
}

func (s *Schema) oneOrMore(key string, required bool, doc string, item value.Value, more ...value.Member) {
	s.add(key, required, doc, append([]value.Member{{Key: "anyOf", Value: value.List(item,
		value.Object(text("type", "array"), value.Member{Key: "items", Value: item}),
	)}}, more...)...)
}

func (s *Schema) sentence(key string, required bool, doc string) {
	s.add(key, required, doc, value.Member{Key: "anyOf", Value: value.List(
		value.Object(text("type", "string")),
		value.Object(text("type", "object"), value.Member{Key: "additionalProperties", Value: value.Object(text("type", "string"))}),
	)})
}

// settings describes parameter values, or with many a list of them for each.
func (s *Schema) settings(key string, many bool, doc string) {
	one := value.Member{Key: "type", Value: value.List(value.String("number"), value.String("string"), value.String("boolean"))}
	each := value.Object(one)
	if many {
		each = value.Object(value.Member{Key: "anyOf", Value: value.List(each,
			value.Object(text("type", "array"), value.Member{Key: "minItems", Value: value.Number(1)}, value.Member{Key: "items", Value: each}))})
	}
	s.add(key, false, doc, text("type", "object"), value.Member{Key: "additionalProperties", Value: each})
}

func (s *Schema) open(key string, required bool, doc string, wrap func(value.Value) value.Value) *Schema {
	inner := &Schema{doc: doc, wrap: wrap}
	s.children = append(s.children, child{len(s.properties), inner})
	s.add(key, required, doc)
	return inner
}

func (s *Schema) group(key string, required bool, doc string) *Schema {
	return s.open(key, required, doc, func(v value.Value) value.Value { return v })
}

func (s *Schema) named(key string, required bool, doc string) *Schema {
	return s.open(key, required, doc, func(v value.Value) value.Value {
		return value.Object(text("type", "object"), value.Member{Key: "additionalProperties", Value: v}, text("description", doc))
	})
}

func (s *Schema) listed(key string, required bool, doc string) *Schema {
	return s.open(key, required, doc, func(v value.Value) value.Value {
		return value.Object(text("type", "array"), value.Member{Key: "items", Value: v}, text("description", doc))
	})
}

// value is the schema of the group itself.
func (s *Schema) value() value.Value {
	properties := append([]value.Member(nil), s.properties...)
	for _, c := range s.children {
		properties[c.at].Value = c.schema.wrap(c.schema.value())
	}
	members := []value.Member{
		text("type", "object"),
		{Key: "properties", Value: value.Object(properties...)},
		{Key: "additionalProperties", Value: value.Bool(false)},
	}
	if len(s.required) > 0 {
		members = append(members, value.Member{Key: "required", Value: value.List(s.required...)})
	}
	if s.doc != "" {
		members = append(members, text("description", s.doc))
	}
	return value.Object(members...)
}

// JSONSchema is the JSON Schema (draft 2020-12) of study files, from the same
// walk that reads them.
func JSONSchema() value.Value {
	s := &Schema{}
	walkStudy(&codec{mode: describing, schema: s}, &Study{})
	v := s.value()
	for i := range v.Members {
		if v.Members[i].Key == "properties" {
			describeFile(v.Members[i].Value.Members)
		}
	}
	v.Members = append([]value.Member{
		text("$schema", "https://json-schema.org/draft/2020-12/schema"), text("title", "Distal study file"),
	}, v.Members...)
	return v
}

// textsSchema is what a study file says of its texts: where they are.
func textsSchema() value.Value {
	s := &Schema{doc: "where the Markdown texts are: FOLDER/information.LANGUAGE.md, consent, instructions and debrief, for each language"}
	s.text("folder", word{Default: "texts"}, "folder beside the study file")
	s.text("version", word{Required: true}, "version of the consent text, e.g. its date")
	return s.value()
}

// describeFile puts what only study files have in place: texts by their folder,
// and one alternative for each kind of display.
func describeFile(properties []value.Member) {
	for i := range properties {
		if properties[i].Key == "texts" {
			properties[i].Value = textsSchema()
		}
		if properties[i].Key != "displays" {
			continue
		}
		var kinds []value.Value
		for _, k := range display.Kinds() {
			s := &Schema{doc: k.Doc}
			c := &codec{mode: describing, schema: s}
			walkDisplayPlace(c, &DisplaySpec{})
			s.add("kind", true, "kind of display", value.Member{Key: "const", Value: value.String(k.Name)})
			for j := range k.Params {
				describeParam(s, &k.Params[j])
			}
			kinds = append(kinds, s.value())
		}
		properties[i].Value = value.Object(text("type", "object"),
			value.Member{Key: "additionalProperties", Value: value.Object(value.Member{Key: "oneOf", Value: value.List(kinds...)})},
			text("description", "the displays by name"))
	}
}

func describeParam(s *Schema, p *display.Param) {
	doc := p.Doc
	if p.Unit != "" {
		doc += " [" + p.Unit + "]"
	}
	switch {
	case p.Type == display.Choice:
		standard := -1
		if len(p.Default) > 0 {
			standard = int(p.Default[0])
		}
		s.choice(p.Key, p.Options, standard, p.Required, doc)
	case p.Type == display.Boolean:
		s.flag(p.Key, len(p.Default) > 0 && p.Default[0] != 0, doc)
	case p.MaxCount > 1:
		s.oneOrMore(p.Key, p.Required, doc, value.Object(numberMembers(num{Min: p.Min, Max: p.Max, Whole: p.Type == display.Integer, Required: true})...),
			value.Member{Key: "default", Value: value.Numbers(p.Default)})
	default:
		rule := num{Min: p.Min, Max: p.Max, Required: p.Required, Whole: p.Type == display.Integer}
		if len(p.Default) > 0 {
			rule.Default = p.Default[0]
		}
		s.number(p.Key, rule, doc)
	}
}
