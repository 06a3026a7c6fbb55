package enrol

import (
	"embed"
	"regexp"
)

//go:embed text
var texts embed.FS

// words are what stands in place of {WORD} in a text.
type words map[string]string

var placeholder = regexp.MustCompile(`\{[A-Z]+\}`)

// fill returns a text of the program with its words. None may lack.
func (w words) fill(name string) []byte {
	text, err := texts.ReadFile("text/" + name)
	if err != nil {
		panic(err) // it is part of the program
	}
	return placeholder.ReplaceAllFunc(text, func(p []byte) []byte {
		word, ok := w[string(p[1:len(p)-1])]
		if !ok {
			panic("enrol: no word for " + string(p))
		}
		return []byte(word)
	})
}
