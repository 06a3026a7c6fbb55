package main

import (
	"context"
	"fmt"
	"runtime"
	"runtime/debug"
)

type versionCmd struct{}

func (versionCmd) Help() string {
	return "Example:\n\n  selvage version\n"
}

// Run implements the verb.
func (versionCmd) Run(_ context.Context, con *console) error {
	_, err := fmt.Fprintln(con.out, version())
	return err
}

// version names the program as it was built.
func version() string {
	name, commit, changed := "built outside its repository", "", ""
	if info, ok := debug.ReadBuildInfo(); ok {
		if v := info.Main.Version; v != "" && v != "(devel)" {
			name = v
		}
		for _, s := range info.Settings {
			switch {
			case s.Key == "vcs.revision":
				commit = ", commit " + s.Value[:min(12, len(s.Value))]
			case s.Key == "vcs.modified" && s.Value == "true":
				changed = " with changes"
			}
		}
	}
	return fmt.Sprintf("selvage %s%s%s (%s, %s/%s)", name, commit, changed, runtime.Version(), runtime.GOOS, runtime.GOARCH)
}
