package nexus

import (
	"encoding/binary"
	"fmt"
	"math"
	"unicode/utf8"
)

// Object header message types (File Format Specification, IV.A.2).
const (
	msgDataspace = 0x01
	msgLinkInfo  = 0x02
	msgDatatype  = 0x03
	msgFill      = 0x05
	msgLink      = 0x06
	msgLayout    = 0x08
	msgGroupInfo = 0x0a
	msgFilter    = 0x0b
	msgAttribute = 0x0c
	msgAttrInfo  = 0x15
)

// undefined is the address of something that does not exist.
const undefined = math.MaxUint64

// Datatype messages, version 1, little-endian (IV.A.2.d). Properties of a
// float: bit offset, precision, exponent place and size, mantissa place and
// size, exponent bias; of an integer: bit offset and precision.
var (
	typeFloat32 = []byte{0x11, 0x20, 31, 0, 4, 0, 0, 0, 0, 0, 32, 0, 23, 8, 0, 23, 127, 0, 0, 0}
	typeFloat64 = []byte{0x11, 0x20, 63, 0, 8, 0, 0, 0, 0, 0, 64, 0, 52, 11, 0, 52, 0xff, 3, 0, 0}
	typeInt64   = []byte{0x10, 0x08, 0, 0, 8, 0, 0, 0, 0, 0, 64, 0}
	// typeText is a variable-length UTF-8 string over unsigned bytes.
	typeText = []byte{0x19, 0x01, 0x01, 0, 16, 0, 0, 0, 0x10, 0, 0, 0, 1, 0, 0, 0, 0, 0, 8, 0}
)

// typeString is a fixed-length string, null-padded, ASCII if it can be.
func typeString(s string) []byte {
	b := []byte{0x13, 0x01, 0, 0}
	if !ascii(s) {
		b[1] |= 0x10
	}
	return binary.LittleEndian.AppendUint32(b, uint32(max(1, len(s))))
}

func ascii(s string) bool {
	for i := range len(s) {
		if s[i] >= utf8.RuneSelf {
			return false
		}
	}
	return true
}

// dataspace is a scalar (no sides) or simple dataspace, version 2.
func dataspace(shape []int) []byte {
	b := []byte{2, byte(len(shape)), 0, 0}
	if len(shape) > 0 {
		b[3] = 1
	}
	for _, s := range shape {
		b = binary.LittleEndian.AppendUint64(b, uint64(s))
	}
	return b
}

// linkMessage is a hard link, version 1, with its name marked UTF-8.
func linkMessage(name string, addr uint64) []byte {
	b := []byte{1, 0x10 | 0x01, 1} // name charset present, 2-byte name length
	b = binary.LittleEndian.AppendUint16(b, uint16(len(name)))
	b = append(b, name...)
	return binary.LittleEndian.AppendUint64(b, addr)
}

// attrMessage is an attribute, version 3.
func attrMessage(a Attr, h *heap) ([]byte, error) {
	if err := checkName("attribute", a.Name); err != nil {
		return nil, err
	}
	typ, space, data, err := attrValue(a.Value, h)
	if err != nil {
		return nil, fmt.Errorf("attribute %q: %w", a.Name, err)
	}
	b := []byte{3, 0}
	for _, n := range []int{len(a.Name) + 1, len(typ), len(space)} {
		b = binary.LittleEndian.AppendUint16(b, uint16(n))
	}
	b = append(b, 1) // name charset UTF-8
	b = append(append(b, a.Name...), 0)
	b = append(append(append(b, typ...), space...), data...)
	if len(b) > maxMessage {
		return nil, fmt.Errorf("attribute %q: %d bytes, HDF5 allows %d", a.Name, len(b), maxMessage)
	}
	return b, nil
}

func attrValue(v any, h *heap) (typ, space, data []byte, err error) {
	switch v := v.(type) {
	case string:
		data, err = h.ref(v)
		return typeText, dataspace(nil), data, err
	case []string:
		for _, s := range v {
			r, err := h.ref(s)
			if err != nil {
				return nil, nil, nil, err
			}
			data = append(data, r...)
		}
		return typeText, dataspace([]int{len(v)}), data, nonEmpty(len(v))
	case int:
		return typeInt64, dataspace(nil), binary.LittleEndian.AppendUint64(nil, uint64(v)), nil
	case []int:
		for _, n := range v {
			data = binary.LittleEndian.AppendUint64(data, uint64(n))
		}
		return typeInt64, dataspace([]int{len(v)}), data, nonEmpty(len(v))
	case float64:
		return typeFloat64, dataspace(nil), binary.LittleEndian.AppendUint64(nil, math.Float64bits(v)), nil
	case []float64:
		for _, f := range v {
			data = binary.LittleEndian.AppendUint64(data, math.Float64bits(f))
		}
		return typeFloat64, dataspace([]int{len(v)}), data, nonEmpty(len(v))
	}
	return nil, nil, nil, fmt.Errorf("cannot write a %T", v)
}

func nonEmpty(n int) error {
	if n == 0 {
		return fmt.Errorf("an empty list cannot be written")
	}
	return nil
}

// header wraps messages into a version 2 object header (IV.A.1.b).
type header struct{ body []byte }

func (h *header) add(typ byte, flags byte, msg []byte) {
	h.body = append(h.body, typ)
	h.body = binary.LittleEndian.AppendUint16(h.body, uint16(len(msg)))
	h.body = append(append(h.body, flags), msg...)
}

func (h *header) bytes() []byte {
	b := []byte("OHDR\x02\x02") // version 2, chunk size in 4 bytes
	b = binary.LittleEndian.AppendUint32(b, uint32(len(h.body)))
	b = append(b, h.body...)
	return binary.LittleEndian.AppendUint32(b, checksum(b))
}

// addAttrs adds the attribute info message, without which readers count no
// attributes, and the attributes.
func (h *header) addAttrs(attrs []Attr, hp *heap) error {
	info := binary.LittleEndian.AppendUint64([]byte{0, 0}, undefined)
	h.add(msgAttrInfo, 0, binary.LittleEndian.AppendUint64(info, undefined))
	seen := map[string]bool{}
	for _, a := range attrs {
		if seen[a.Name] {
			return fmt.Errorf("two attributes named %q", a.Name)
		}
		seen[a.Name] = true
		m, err := attrMessage(a, hp)
		if err != nil {
			return err
		}
		h.add(msgAttribute, 0, m)
	}
	return nil
}
