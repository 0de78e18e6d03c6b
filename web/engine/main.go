//go:build wasip1

// Command engine is the WebAssembly entry over package run: what the browser
// calls. Texts pass through one buffer; numbers that are drawn are read in
// place. Every call that gives an int32 gives 0 for success; otherwise the
// result is a plain message. Build it with -buildmode=c-shared.
package main

import (
	"runtime"
	"unsafe"

	"distal/experiments/display"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/value"
)

func main() {}

var (
	input  []byte
	output []byte
	state  *run.Run
	parsed *study.Study
	header [6]int32
)

//go:wasmexport buffer
func buffer(n int32) int32 {
	if int(n) > cap(input) {
		input = make([]byte, n)
	}
	input = input[:n]
	if n == 0 {
		return 0
	}
	return address(unsafe.Pointer(&input[0]))
}

func address(p unsafe.Pointer) int32 { return int32(uintptr(p)) }

//go:wasmexport result_ptr
func resultPtr() int32 {
	if len(output) == 0 {
		return 0
	}
	return address(unsafe.Pointer(&output[0]))
}

//go:wasmexport result_len
func resultLen() int32 { return int32(len(output)) }

func fail(message string) int32 {
	output = append(output[:0], message...)
	return 1
}

func give(v value.Value) int32 {
	text, err := value.Canonical(v)
	if err != nil {
		return fail(err.Error())
	}
	output = append(output[:0], text...)
	return 0
}

// open begins a run of the study whose canonical JSON stands in the buffer.
//
//go:wasmexport open
func open(n, seedLow, seedHigh, group, order int32) int32 {
	tree, err := value.ParseJSON(input[:n])
	if err != nil {
		return fail(err.Error())
	}
	s, problems := study.Decode(tree)
	if problems.Failed() {
		return fail(problems.Error())
	}
	seed := uint64(uint32(seedLow)) | uint64(uint32(seedHigh))<<32
	r, err := run.New(s, run.Assignment{Seed: seed, Group: int(group), Order: int(order)})
	if err != nil {
		return fail(err.Error())
	}
	parsed, state = s, r
	return 0
}

const notOpen = "no study is open"

// apply takes the record whose JSON stands in the buffer.
//
//go:wasmexport apply
func apply(n int32) int32 {
	if state == nil {
		return fail(notOpen)
	}
	tree, err := value.ParseJSON(input[:n])
	if err != nil {
		return fail(err.Error())
	}
	rec, err := run.DecodeRecord(tree)
	if err != nil {
		return fail(err.Error())
	}
	if err := state.Apply(rec); err != nil {
		return fail(err.Error())
	}
	collect()
	return 0
}

// collectEvery is after how many records the garbage of their texts is collected.
const collectEvery = 16

var applied int

// collect has the garbage collected between trials: nothing else gives a
// module that is only called from outside the time for it, and its memory would
// grow by 100 kB a trial.
func collect() {
	if applied++; applied%collectEvery == 0 {
		runtime.GC()
	}
}

// next gives the next step as JSON.
//
//go:wasmexport next
func next() int32 {
	if state == nil {
		return fail(notOpen)
	}
	return give(state.Next().Encode(parsed))
}

//go:wasmexport begin_trial
func beginTrial() int32 {
	if state == nil || !state.BeginTrial() {
		return fail("the next step is not a trial")
	}
	return 0
}

// frame advances the stimulus by n refresh intervals and gives the address of
// pointers and lengths of dots, patches and batches.
//
//go:wasmexport frame
func frame(n int32) int32 {
	if state == nil {
		return 0
	}
	return describe(state.Frame(int(n)))
}

// adjust sets what the participant adjusts, from the next frame on.
//
//go:wasmexport adjust
func adjust(x float64) {
	if state != nil {
		state.Adjust(x)
	}
}

//go:wasmexport fixation
func fixation() int32 {
	if state == nil {
		return 0
	}
	return describe(state.FixationList())
}

func describe(l *display.List) int32 {
	if l == nil {
		return 0
	}
	header = [6]int32{}
	if n := len(l.Dots); n > 0 {
		header[0], header[1] = address(unsafe.Pointer(&l.Dots[0])), int32(n)
	}
	if n := len(l.Patches); n > 0 {
		header[2], header[3] = address(unsafe.Pointer(&l.Patches[0])), int32(n)
	}
	if n := len(l.Batches); n > 0 {
		header[4], header[5] = address(unsafe.Pointer(&l.Batches[0])), int32(n)
	}
	return address(unsafe.Pointer(&header))
}

// finish_trial joins the measurement in the buffer to the trial's record.
//
//go:wasmexport finish_trial
func finishTrial(n int32) int32 {
	if state == nil {
		return fail(notOpen)
	}
	tree, err := value.ParseJSON(input[:n])
	if err != nil {
		return fail(err.Error())
	}
	m, err := run.DecodeMeasurement(tree)
	if err != nil {
		return fail(err.Error())
	}
	rec := run.Record{Kind: run.KindTrial, Trial: state.FinishTrial(m)}
	if rec.Trial == nil {
		return fail("no trial has begun")
	}
	return give(rec.Encode())
}

// calibrate computes what settings mean and whether they are good enough.
//
//go:wasmexport calibrate
func calibrate(n int32) int32 {
	if state == nil {
		return fail(notOpen)
	}
	tree, err := value.ParseJSON(input[:n])
	if err != nil {
		return fail(err.Error())
	}
	v, err := run.Calibrate(parsed, tree)
	if err != nil {
		return fail(err.Error())
	}
	return give(v)
}
