package nexus

import "encoding/binary"

// fanout is the number of entries of a full B-tree node: twice K, and K is
// 32 for chunk indexes where the superblock says nothing else.
const fanout = 64

// entry is a chunk or a subtree and the key to its left.
type entry struct {
	addr   uint64
	bytes  uint32 // of the filtered chunk
	origin []int
}

// writeIndex writes a version 1 B-tree of raw data chunks (File Format
// Specification, III.A.1), whose entries are in row-major order, and returns
// the root's address. Every node is written at its full size, as readers
// fetch it.
func writeIndex(s *sink, entries []entry, chunk []int, size int) uint64 {
	last := make([]int, len(chunk))
	for i := range chunk { // a key right of every chunk
		last[i] = entries[len(entries)-1].origin[i] + chunk[i]
	}
	end := entry{origin: last}
	for level := byte(0); ; level++ {
		var up []entry
		n := (len(entries) + fanout - 1) / fanout
		base := s.align()
		bytes := uint64(nodeSize(len(chunk)))
		for i := range n {
			left, right := uint64(undefined), uint64(undefined)
			if i > 0 {
				left = base + uint64(i-1)*bytes
			}
			if i < n-1 {
				right = base + uint64(i+1)*bytes
			}
			part, next := entries[i*fanout:], end
			if len(part) > fanout {
				part, next = part[:fanout], part[fanout]
			}
			first := part[0]
			first.addr = base + uint64(i)*bytes
			up = append(up, first)
			s.write(indexNode(level, left, right, part, next, size, i == n-1))
		}
		if n == 1 {
			return base
		}
		entries = up
	}
}

// nodeSize is the size of a node: signature, type, level, count and siblings,
// then fanout children between fanout+1 keys; a multiple of 8.
func nodeSize(rank int) int {
	return 24 + fanout*8 + (fanout+1)*keySize(rank)
}

// keySize is chunk size, filter mask, one offset per side, and the offset
// within an element.
func keySize(rank int) int { return 8 + 8*(rank+1) }

func indexNode(level byte, left, right uint64, part []entry, next entry, size int, last bool) []byte {
	le := binary.LittleEndian
	b := append([]byte("TREE"), 1, level)
	b = le.AppendUint16(b, uint16(len(part)))
	b = le.AppendUint64(le.AppendUint64(b, left), right)
	key := func(e entry, element int) {
		b = le.AppendUint32(b, e.bytes)
		b = le.AppendUint32(b, 0) // filter mask: none skipped
		for _, o := range e.origin {
			b = le.AppendUint64(b, uint64(o))
		}
		b = le.AppendUint64(b, uint64(element))
	}
	for _, e := range part {
		key(e, 0)
		b = le.AppendUint64(b, e.addr)
	}
	if last {
		key(next, size)
	} else {
		key(next, 0)
	}
	return append(b, make([]byte, nodeSize(len(next.origin))-len(b))...)
}
