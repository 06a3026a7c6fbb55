package survey

import (
	"fmt"
	"strings"
	"unicode"
	"unicode/utf8"
)

// validRobot reports whether s can name a robot: a letter or digit followed by
// letters, digits, _ and -.
func validRobot(s string) bool { return validID(s, maxRobotID, false) }

// validTie reports whether s can name a tie: as a robot, longer, and with dots.
func validTie(s string) bool { return validID(s, maxTieID, true) }

var (
	robotRule = fmt.Sprintf("1 to %d letters, digits, _ and -, the first a letter or digit", maxRobotID)
	tieRule   = fmt.Sprintf("1 to %d letters, digits, _, - and dots, the first a letter or digit", maxTieID)
	textRule  = fmt.Sprintf("one line of printable text, at most %d bytes, no blank at either end", maxText)
)

func validID(s string, most int, dots bool) bool {
	if s == "" || len(s) > most {
		return false
	}
	for i := range len(s) {
		b := s[i]
		alnum := 'a' <= b && b <= 'z' || 'A' <= b && b <= 'Z' || '0' <= b && b <= '9'
		if !alnum && (i == 0 || b != '_' && b != '-' && !(dots && b == '.')) {
			return false
		}
	}
	return true
}

// validText reports whether s is one line of printable text of bounded length.
func validText(s string) bool {
	return len(s) <= maxText && printable(s, false) && strings.TrimSpace(s) == s
}

// printable reports whether s is valid UTF-8 of printable characters, with line
// ends and tabs if lines is set.
func printable(s string, lines bool) bool {
	if !utf8.ValidString(s) {
		return false
	}
	for _, r := range s {
		if !unicode.IsPrint(r) && !(lines && (r == '\n' || r == '\t')) {
			return false
		}
	}
	return true
}
