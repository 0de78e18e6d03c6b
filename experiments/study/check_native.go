//go:build !wasip1

package study

// checking: contradictions are looked for wherever studies are read.
const checking = true
