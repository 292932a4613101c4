package nexus

import "encoding/binary"

// heap gathers the attribute strings of a file into global heap collections
// (File Format Specification, III.E). It works in two passes over the same
// attributes in the same order: the first collects the strings, then place
// fixes the addresses, then the second pass hands out references.
type heap struct {
	index  map[string]int // position in texts
	texts  []string
	addr   []uint64 // of the collection that holds text i; nil before place
	number []uint32 // of text i within its collection
}

// perHeap bounds the objects of one collection, whose numbers are uint16.
const perHeap = 1 << 15

// ref returns the 16-byte disk form of a variable-length string: length,
// collection address, object number. An empty string has no object.
func (h *heap) ref(s string) ([]byte, error) {
	if err := checkText(s); err != nil {
		return nil, err
	}
	b := binary.LittleEndian.AppendUint32(nil, uint32(len(s)))
	if s == "" {
		return append(b, make([]byte, 12)...), nil
	}
	i, ok := h.index[s]
	if !ok {
		i = len(h.texts)
		h.index[s] = i
		h.texts = append(h.texts, s)
	}
	if h.addr == nil {
		return append(b, make([]byte, 12)...), nil
	}
	b = binary.LittleEndian.AppendUint64(b, h.addr[i])
	return binary.LittleEndian.AppendUint32(b, h.number[i]), nil
}

// place writes the collections and fixes every text's address.
func (h *heap) place(s *sink) {
	h.addr = make([]uint64, len(h.texts))
	h.number = make([]uint32, len(h.texts))
	for i := 0; i < len(h.texts); i += perHeap {
		h.collection(s, i, min(i+perHeap, len(h.texts)))
	}
}

func (h *heap) collection(s *sink, from, to int) {
	b := []byte("GCOL\x01\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00")
	addr := s.align()
	for i := from; i < to; i++ {
		h.addr[i], h.number[i] = addr, uint32(i-from+1)
		b = binary.LittleEndian.AppendUint16(b, uint16(i-from+1))
		b = append(b, 1, 0, 0, 0, 0, 0) // one reference
		b = binary.LittleEndian.AppendUint64(b, uint64(len(h.texts[i])))
		b = append(b, h.texts[i]...)
		b = append(b, make([]byte, -len(b)&7)...)
	}
	// Object 0 is the free space, its size counting its own 16 bytes. A
	// collection is at least 4096 bytes.
	free := max(16, 4096-len(b))
	b = append(b, make([]byte, 8)...)
	b = binary.LittleEndian.AppendUint64(b, uint64(free))
	b = append(b, make([]byte, free-16)...)
	binary.LittleEndian.PutUint64(b[8:], uint64(len(b)))
	s.write(b)
}
