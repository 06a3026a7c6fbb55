package msgs

import (
	"errors"

	"google.golang.org/protobuf/encoding/protowire"
)

// Signer signs for one party, a robot or the base. Signatures are Ed25519, RFC 8032.
type Signer interface {
	Sign(text []byte) (signature []byte, err error)
}

// Verifier knows the public keys of a fleet.
type Verifier interface {
	// Verify returns nil when signature is over text and by this robot, or by the base when robot is empty, and the key counted
	// at the time at which the bus took the message.
	Verify(robot string, storedNS int64, text, signature []byte) error
}

// ErrUnsigned means that a message carries no signature.
var ErrUnsigned = errors.New("no signature")

// Sign returns a message with the signature of who publishes it on a subject. Every message is signed, a chunk and a head of a
// summary like any other; a summary is so before it is split too, so that it can be verified when nobody knows the chunks any more.
func Sign(subject string, payload []byte, s Signer) ([]byte, error) {
	body, signature, err := detach(payload)
	if err == nil && signature != nil {
		err = wrong("signature", "one already", "none")
	}
	if err != nil {
		return nil, ofKind("signing "+subject, err)
	}
	if signature, err = s.Sign(signedText(subject, body)); err != nil {
		return nil, err
	}
	if len(signature) != signatureSize {
		return nil, ofKind("signing "+subject, wrong("signature", len(signature), "%d bytes", signatureSize))
	}
	return attach(body, signature), nil
}

// Verify tells whether a message was signed by the party that a subject belongs to, and for this subject. A ruling belongs to the
// base: whoever rules does so with its key.
func Verify(subject string, storedNS int64, payload []byte, v Verifier) error {
	at, err := ParseSubject(subject)
	if err != nil {
		return err
	}
	body, signature, err := detach(payload)
	switch {
	case err != nil:
		return ofKind(at.Kind, err)
	case signature == nil:
		return ErrUnsigned
	}
	robot := at.Robot
	if !at.Up {
		robot = ""
	}
	return v.Verify(robot, storedNS, signedText(subject, body), signature)
}

// signedText is what a signature is over: a byte, the name of the format, the subject and the message without its signature. The
// subject names fleet, robot, direction and kind, and contains no zero byte; the message names journal and record, or incarnation
// and epoch. The first byte occurs in no text, so that nobody can have it signed as the challenge of a login, for which the bus uses
// the same keys.
func signedText(subject string, body []byte) []byte {
	const format = "\xffselvage 1\x00"
	b := make([]byte, 0, len(format)+len(subject)+1+len(body))
	b = append(b, format...)
	b = append(b, subject...)
	b = append(b, 0)
	return append(b, body...)
}

// signatureTag begins the field of a signature: number 100, bytes, 64 of them. signatureRoom is what the field adds to a message.
const (
	signatureTag  = "\xa2\x06\x40"
	signatureRoom = len(signatureTag) + signatureSize
)

// attach returns body with the signature behind it.
func attach(body, signature []byte) []byte {
	b := make([]byte, 0, len(body)+signatureRoom)
	b = append(b, body...)
	b = append(b, signatureTag...)
	return append(b, signature...)
}

// detach takes a message apart. The signature is nil when there is none; one that is not the last field is an error, since what
// comes behind it would not be signed.
func detach(payload []byte) (body, signature []byte, err error) {
	for at := 0; at < len(payload); {
		num, typ, n := protowire.ConsumeTag(payload[at:])
		if n < 0 {
			return nil, nil, wrong("message", "bytes that are no field", "a protobuf message")
		}
		length := protowire.ConsumeFieldValue(num, typ, payload[at+n:])
		if length < 0 {
			return nil, nil, wrong("message", "a field cut short", "a protobuf message")
		}
		if num != signatureField {
			at += n + length
			continue
		}
		if cut := len(payload) - signatureSize; cut < at || string(payload[at:cut]) != signatureTag {
			return nil, nil, wrong("signature", "another field", "%d bytes at the end of the message", signatureSize)
		}
		return payload[:at:at], payload[len(payload)-signatureSize:], nil
	}
	return payload, nil, nil
}
