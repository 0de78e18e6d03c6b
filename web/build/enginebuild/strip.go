package enginebuild

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"strings"
)

// Go's linker keeps for every function its name, source files and lines, which
// only tracebacks and runtime.Caller read. Nobody reads a traceback of the
// engine (a panic reaches the page as "the engine stopped"), and they are a
// tenth of the download.
//
// The layout is that of package runtime (pcHeader and moduledata in symtab.go,
// _func in runtime2.go).

var (
	errNoTable  = errors.New("no table of functions found")
	errBadTable = errors.New("the table of functions is not as expected")
)

const (
	headerMagic   = 0xfffffff1 // since Go 1.20
	headerBytes   = 72
	functionBytes = 44 // of a _func without its lists
)

// stripTracebacks gives a module without what only tracebacks read. Code and
// all other data stay as they are.
func stripTracebacks(module []byte) ([]byte, error) {
	sections, err := readSections(module)
	if err != nil {
		return nil, err
	}
	for i, s := range sections {
		if s.id != sectionData {
			continue
		}
		memory, err := readSegments(s.content)
		if err != nil {
			return nil, err
		}
		if err := memory.stripFunctions(); err != nil {
			return nil, err
		}
		sections[i].content = memory.segments()
	}
	return writeSections(module[:8], sections), nil
}

// image is the linear memory as the data section sets it.
type image struct{ bytes []byte }

// mostBytes is far above what the engine's data need.
const mostBytes = 1 << 26

func (m *image) stripFunctions() error {
	table, err := m.functionTable()
	if err != nil {
		return err
	}
	at := func(field int) int { return int(binary.LittleEndian.Uint64(table[8*field:])) }
	functions, names, units, files, tables, index := at(1), at(4), at(5), at(6), at(7), at(8)
	if !(headerBytes <= names && names <= units && units <= files && files <= tables && tables <= index && index+8*functions < len(table)) {
		return errBadTable
	}
	used := make([]bool, index-tables)
	used[0] = true // offset 0 stands for no table
	for i := range functions {
		f := index + int(binary.LittleEndian.Uint32(table[index+8*i+4:]))
		if f+functionBytes > len(table) {
			return errBadTable
		}
		if err := stripFunction(table[f:], table[tables:index], used); err != nil {
			return err
		}
	}
	keepNames(table[names:units])
	clear(table[units:tables])
	for i, keep := range used {
		if !keep {
			table[tables+i] = 0
		}
	}
	return nil
}

// functionTable gives the memory from the header of the table on.
func (m *image) functionTable() ([]byte, error) {
	pattern := binary.LittleEndian.AppendUint32(nil, headerMagic)
	pattern = append(pattern, 0, 0, 1, 8) // padding, size of an instruction and of a pointer
	i := bytes.Index(m.bytes, pattern)
	if i < 0 || len(m.bytes)-i < headerBytes || bytes.Contains(m.bytes[i+1:], pattern) {
		return nil, errNoTable
	}
	return m.bytes[i:], nil
}

// stripFunction clears a function's references to files and lines and marks
// the tables (of stack sizes, of live pointers) that it goes on using.
func stripFunction(f, tables []byte, used []bool) error {
	const stackSizes, sourceFiles, sourceLines, tableCount, unit, startLine = 16, 20, 24, 28, 32, 36
	for _, field := range []int{sourceFiles, sourceLines, unit, startLine} {
		clear(f[field : field+4])
	}
	count := int(binary.LittleEndian.Uint32(f[tableCount:]))
	if functionBytes+4*count > len(f) {
		return errBadTable
	}
	mark := func(field int) error {
		from := int(binary.LittleEndian.Uint32(f[field:]))
		if from == 0 {
			return nil
		}
		to, ok := tableEnd(tables, from)
		if !ok {
			return errBadTable
		}
		for i := from; i < to; i++ {
			used[i] = true
		}
		return nil
	}
	if err := mark(stackSizes); err != nil {
		return err
	}
	for i := range count {
		if err := mark(functionBytes + 4*i); err != nil {
			return err
		}
	}
	return nil
}

// tableEnd finds the end of a table of pairs (change of value, number of
// instructions), which a change of 0 ends unless it is the first.
func tableEnd(tables []byte, from int) (int, bool) {
	at := from
	for first := true; ; first = false {
		if at >= len(tables) {
			return 0, false
		}
		if tables[at] == 0 && !first {
			return at + 1, true
		}
		for range 2 {
			_, n := binary.Uvarint(tables[at:])
			if n <= 0 {
				return 0, false
			}
			at += n
		}
	}
}

// keepNames clears the functions' names but those that the runtime compares.
func keepNames(names []byte) {
	for len(names) > 0 {
		end := bytes.IndexByte(names, 0)
		if end < 0 {
			end = len(names)
		}
		if !strings.HasPrefix(string(names[:end]), "reflect.") {
			clear(names[:end])
		}
		names = names[min(end+1, len(names)):]
	}
}

// WebAssembly's binary format, as far as the data section needs it
// (WebAssembly Core Specification 2.0, section 5.5).

const sectionData = 11

type section struct {
	id      byte
	content []byte
}

func readSections(module []byte) ([]section, error) {
	if len(module) < 8 || string(module[:4]) != "\x00asm" {
		return nil, errors.New("not a WebAssembly module")
	}
	var out []section
	for rest := module[8:]; len(rest) > 0; {
		size, n := binary.Uvarint(rest[1:])
		if n <= 0 || uint64(len(rest)-1-n) < size {
			return nil, errors.New("a section of the module is cut off")
		}
		from := 1 + n
		out = append(out, section{rest[0], rest[from : from+int(size)]})
		rest = rest[from+int(size):]
	}
	return out, nil
}

func writeSections(header []byte, sections []section) []byte {
	out := bytes.Clone(header)
	for _, s := range sections {
		out = append(out, s.id)
		out = binary.AppendUvarint(out, uint64(len(s.content)))
		out = append(out, s.content...)
	}
	return out
}

// readSegments gives the memory that active segments with constant offsets set.
func readSegments(content []byte) (*image, error) {
	bad := func(i uint64) error { return fmt.Errorf("data segment %d is not as expected", i) }
	count, n := binary.Uvarint(content)
	if n <= 0 {
		return nil, bad(0)
	}
	content = content[n:]
	m := &image{}
	for i := range count {
		if len(content) < 4 || content[0] != 0 || content[1] != 0x41 { // memory 0, i32.const
			return nil, bad(i)
		}
		offset, n := signed(content[2:])
		if n <= 0 || offset < 0 || len(content) < 3+n || content[2+n] != 0x0b { // end
			return nil, bad(i)
		}
		content = content[3+n:]
		size, n := binary.Uvarint(content)
		if n <= 0 || uint64(len(content)-n) < size {
			return nil, bad(i)
		}
		if end := offset + int(size); end > mostBytes {
			return nil, bad(i)
		} else if end > len(m.bytes) {
			m.bytes = append(m.bytes, make([]byte, end-len(m.bytes))...)
		}
		copy(m.bytes[offset:], content[n:n+int(size)])
		content = content[n+int(size):]
	}
	return m, nil
}

// segments gives the content of a data section that sets the memory, leaving
// out runs of zeros longer than what a segment costs.
func (m *image) segments() []byte {
	const overhead = 8
	var out []byte
	count := uint64(0)
	for at := 0; at < len(m.bytes); {
		if m.bytes[at] == 0 {
			at++
			continue
		}
		end, zeros := at, 0
		for i := at; i < len(m.bytes) && zeros < overhead; i++ {
			if m.bytes[i] == 0 {
				zeros++
			} else {
				end, zeros = i+1, 0
			}
		}
		out = append(out, 0, 0x41)
		out = appendSigned(out, at)
		out = append(out, 0x0b)
		out = binary.AppendUvarint(out, uint64(end-at))
		out = append(out, m.bytes[at:end]...)
		count++
		at = end
	}
	return append(binary.AppendUvarint(nil, count), out...)
}

// signed reads a signed LEB128 number; n is 0 if there is none.
func signed(b []byte) (value, n int) {
	shift := 0
	for n < len(b) && n < 5 {
		x := b[n]
		n++
		value |= int(x&0x7f) << shift
		shift += 7
		if x&0x80 == 0 {
			if x&0x40 != 0 {
				value -= 1 << shift
			}
			return value, n
		}
	}
	return 0, 0
}

func appendSigned(out []byte, value int) []byte {
	for {
		x := byte(value & 0x7f)
		value >>= 7
		if value == 0 && x&0x40 == 0 || value == -1 && x&0x40 != 0 {
			return append(out, x)
		}
		out = append(out, x|0x80)
	}
}
