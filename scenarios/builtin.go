package scenarios

import (
	"embed"
	"fmt"
	"strings"
)

//go:embed builtin/*.yaml
var builtin embed.FS

// BuiltinNames returns the names of the scenarios that come with the program, the default first.
func BuiltinNames() []string { return []string{"mine", "store", "wood"} }

// Builtin returns a fresh copy of a scenario that comes with the program.
func Builtin(name string) (*Scenario, error) {
	for _, known := range BuiltinNames() {
		if name != known {
			continue
		}
		file := "builtin/" + name + ".yaml"
		data, err := builtin.ReadFile(file)
		if err != nil {
			return nil, fmt.Errorf("scenarios: %w", err)
		}
		return Load(data, file)
	}
	return nil, fmt.Errorf("scenarios: no scenario named %q, expected one of %s", clip(name), strings.Join(BuiltinNames(), ", "))
}
