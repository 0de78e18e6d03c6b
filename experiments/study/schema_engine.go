//go:build wasip1

package study

// Schema has no use in the browser's engine: these stand-ins keep it small.
type Schema struct{}

func (*Schema) number(string, num, string)                 {}
func (*Schema) numbers(string, num, string)                {}
func (*Schema) text(string, word, string)                  {}
func (*Schema) texts(string, string)                       {}
func (*Schema) flag(string, bool, string)                  {}
func (*Schema) choice(string, []string, int, bool, string) {}
func (*Schema) sentence(string, bool, string)              {}
func (*Schema) settings(string, bool, string)              {}
func (*Schema) group(string, bool, string) *Schema         { return nil }
func (*Schema) named(string, bool, string) *Schema         { return nil }
func (*Schema) listed(string, bool, string) *Schema        { return nil }
