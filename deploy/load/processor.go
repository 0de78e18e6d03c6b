package main

import (
	"fmt"
	"os"
	"path/filepath"
	"strconv"
	"strings"
)

// processor is the processor time used so far, seconds.
type processor struct{ server, postgres, own float64 }

// ticksPerSecond is the unit of /proc: 100 on every Linux architecture that Go knows.
const ticksPerSecond = 100

// processorSeconds reads /proc. Postgres is its first process and the children
// of that, ended ones included.
func (h *house) processorSeconds() processor {
	p := processor{server: secondsOf(h.server.Process.Pid, false), own: secondsOf(os.Getpid(), false)}
	text, err := os.ReadFile(filepath.Join(h.data(), "cluster", "postmaster.pid"))
	if err != nil {
		return p
	}
	pid, err := strconv.Atoi(strings.SplitN(string(text), "\n", 2)[0])
	if err != nil {
		return p
	}
	p.postgres = secondsOf(pid, true)
	children, _ := os.ReadFile(fmt.Sprintf("/proc/%d/task/%d/children", pid, pid))
	for _, child := range strings.Fields(string(children)) {
		if n, err := strconv.Atoi(child); err == nil {
			p.postgres += secondsOf(n, false)
		}
	}
	return p
}

// secondsOf is the user and system time of a process, with or without its ended
// children; fields 14 to 17 of /proc/PID/stat, see proc(5).
func secondsOf(pid int, children bool) float64 {
	text, err := os.ReadFile(fmt.Sprintf("/proc/%d/stat", pid))
	if err != nil {
		return 0
	}
	// The second field is a name in brackets that may hold spaces.
	fields := strings.Fields(string(text[strings.LastIndexByte(string(text), ')')+1:]))
	last := 13 // stime
	if children {
		last = 15 // cstime
	}
	ticks := 0
	for i := 11; i < last && i < len(fields); i++ {
		n, _ := strconv.Atoi(fields[i])
		ticks += n
	}
	return float64(ticks) / ticksPerSecond
}
