package quality

import (
	"fmt"
	"math"
	"strings"

	"github.com/google/cel-go/cel"

	"distal/experiments/study"
)

// Rules are a study's exclusion rules, ready to apply. Rules are written in the
// Common Expression Language over the names of Metrics, all of type double.
type Rules struct {
	rules []compiled
}

type compiled struct {
	rule    study.ExclusionRule
	program cel.Program
	uses    []int // metrics that the expression names
}

// Breach is a rule that a run breaks, or that could not be judged.
type Breach struct {
	Rule   string
	Reason string
}

// RuleError is a rule that cannot be used.
type RuleError struct {
	Rule    string
	When    string
	Message string
}

func (e *RuleError) Error() string {
	return fmt.Sprintf("exclusion rule %q: %q: %s", e.Rule, e.When, e.Message)
}

// Compile prepares rules; a *RuleError says which one is wrong and why.
func Compile(rules []study.ExclusionRule) (*Rules, error) {
	env, err := environment()
	if err != nil {
		return nil, err
	}
	var out Rules
	for _, rule := range rules {
		c, err := compile(env, rule)
		if err != nil {
			return nil, err
		}
		out.rules = append(out.rules, c)
	}
	return &out, nil
}

func environment() (*cel.Env, error) {
	options := []cel.EnvOption{cel.CrossTypeNumericComparisons(true)}
	for _, m := range Metrics {
		options = append(options, cel.Variable(m.Name, cel.DoubleType))
	}
	env, err := cel.NewEnv(options...)
	if err != nil {
		return nil, fmt.Errorf("prepare exclusion rules: %w", err)
	}
	return env, nil
}

func compile(env *cel.Env, rule study.ExclusionRule) (compiled, error) {
	ast, issues := env.Compile(rule.When)
	if issues.Err() != nil {
		return compiled{}, &RuleError{rule.Name, rule.When, firstIssue(issues) + "; known names: " + strings.Join(names(), ", ")}
	}
	if !ast.OutputType().IsExactType(cel.BoolType) {
		return compiled{}, &RuleError{rule.Name, rule.When, "it must be true or false, e.g. catch_accuracy < 0.8"}
	}
	program, err := env.Program(ast, cel.CostLimit(10_000))
	if err != nil {
		return compiled{}, &RuleError{rule.Name, rule.When, err.Error()}
	}
	c := compiled{rule: rule, program: program}
	seen := map[string]bool{}
	for _, ref := range ast.NativeRep().ReferenceMap() {
		seen[ref.Name] = true
	}
	for i, m := range Metrics {
		if seen[m.Name] {
			c.uses = append(c.uses, i)
		}
	}
	return c, nil
}

func firstIssue(issues *cel.Issues) string {
	e := issues.Errors()[0]
	return fmt.Sprintf("column %d: %s", e.Location.Column()+1, e.Message)
}

func names() []string {
	list := make([]string, len(Metrics))
	for i, m := range Metrics {
		list[i] = m.Name
	}
	return list
}

// Apply lists the rules that a run with measures m breaks. A rule about a
// measure that is missing (NaN) is not broken: missing data are for a person to judge.
func (r *Rules) Apply(m Measures) ([]Breach, error) {
	input := make(map[string]any, len(Metrics))
	for i, metric := range Metrics {
		input[metric.Name] = m[i]
	}
	var breaches []Breach
	for _, c := range r.rules {
		if c.missing(m) {
			continue
		}
		result, _, err := c.program.Eval(input)
		if err != nil {
			return nil, fmt.Errorf("exclusion rule %q: %w", c.rule.Name, err)
		}
		if result.Value() == true {
			breaches = append(breaches, Breach{Rule: c.rule.Name, Reason: c.reason(m)})
		}
	}
	return breaches, nil
}

func (c compiled) missing(m Measures) bool {
	for _, i := range c.uses {
		if math.IsNaN(m[i]) {
			return true
		}
	}
	return false
}

// reason is the rule's reason with the values that broke it.
func (c compiled) reason(m Measures) string {
	var values []string
	for _, i := range c.uses {
		values = append(values, fmt.Sprintf("%s = %.4g", Metrics[i].Name, m[i]))
	}
	text := c.rule.Reason
	if text == "" {
		text = c.rule.When
	}
	if len(values) == 0 {
		return text
	}
	return text + " (" + strings.Join(values, ", ") + ")"
}
