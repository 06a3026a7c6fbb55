package msgs

import (
	"strconv"
	"strings"

	"google.golang.org/protobuf/encoding/protowire"
	"google.golang.org/protobuf/proto"
)

// The format this package writes. A message of the same major number is read whatever its minor number, fields it does not
// know are passed over. A newer major number is refused.
const (
	Major = 1
	Minor = 0
)

const signatureField protowire.Number = 100

// seal turns a message whose fields are checked and filled in into bytes, the signature last. There is always room for one.
func seal(kind string, m proto.Message, signature []byte, most int) ([]byte, error) {
	b, err := proto.MarshalOptions{Deterministic: true}.Marshal(m)
	if err != nil {
		return nil, &FieldError{Kind: kind, Field: "message", Found: err.Error(), Want: "fields that can be written"}
	}
	if len(b) > most-signatureRoom {
		return nil, ofKind(kind, wrong("message", len(b), "at most %d bytes without a signature", most-signatureRoom))
	}
	if len(signature) > 0 {
		b = attach(b, signature)
	}
	return b, nil
}

// open reads bytes from outside into m after it has looked at their size and version, and at how often the field
// numbered parts occurs, so that a short message cannot grow into a large one.
func open(kind string, b []byte, m proto.Message, most int, parts protowire.Number) error {
	if len(b) > most {
		return ofKind(kind, wrong("message", len(b), "at most %d bytes", most))
	}
	var major, minor uint64
	count := 0
	for at := 0; at < len(b); {
		num, typ, n := protowire.ConsumeTag(b[at:])
		if n < 0 {
			return ofKind(kind, wrong("message", "bytes that are no field at offset "+strconv.Itoa(at), "a protobuf message"))
		}
		value := at + n
		n = protowire.ConsumeFieldValue(num, typ, b[value:])
		if n < 0 {
			return ofKind(kind, wrong("message", "a field cut short at offset "+strconv.Itoa(at), "a protobuf message"))
		}
		at = value + n
		switch {
		case num == 1 && typ == protowire.VarintType:
			major, _ = protowire.ConsumeVarint(b[value:])
		case num == 2 && typ == protowire.VarintType:
			minor, _ = protowire.ConsumeVarint(b[value:])
		case num == parts:
			count++
		}
	}
	if major > Major {
		return &VersionError{Kind: kind, Major: uint32(min(major, 1<<32-1)), Minor: uint32(min(minor, 1<<32-1))}
	}
	if major < Major {
		return ofKind(kind, wrong("major", major, "%d", Major))
	}
	if count > MaxParts {
		return ofKind(kind, wrong("parts", count, "at most %d", MaxParts))
	}
	if err := (proto.UnmarshalOptions{DiscardUnknown: true}).Unmarshal(b, m); err != nil {
		// The library varies the space in its texts on purpose; a message to people should not.
		text := strings.ReplaceAll(err.Error(), "\u00a0", " ")
		return ofKind(kind, wrong("message", text, "a protobuf message of this kind"))
	}
	return nil
}
