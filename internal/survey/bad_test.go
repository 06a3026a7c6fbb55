package survey

import (
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// swap replaces the first of each old text by the new one that follows it.
func swap(oldNew ...string) func(string) string {
	return func(s string) string {
		for i := 0; i+1 < len(oldNew); i += 2 {
			s = strings.Replace(s, oldNew[i], oldNew[i+1], 1)
		}
		return s
	}
}

func empty(string) string { return "" }

func semicolons(s string) string { return strings.ReplaceAll(s, ",", ";") }

// Each case makes one mistake in one file of a good folder. What Read then says
// is given in full.
var badFolders = []struct {
	name, folder, file string
	change             func(string) string
	want               string
}{
	// survey.yaml
	{"later version", "space.good", "survey.yaml", swap("format: 1", "format: 2\nstations: 3"),
		`survey.yaml:1: key format: found "2", expected 1, the version that this program reads`},
	{"unknown key", "space.good", "survey.yaml", swap("datum:", "moon: full\ndatum:"),
		`survey.yaml:4: found "unknown field \"moon\"", expected only known keys`},
	{"key twice", "space.good", "survey.yaml", swap("dimension: 3", "dimension: 3\ndimension: 2"),
		`survey.yaml:4: found "mapping key \"dimension\" already defined at [3:1]", expected YAML`},
	{"alias", "space.good", "survey.yaml", swap("name: adit", "name: &a adit"),
		`survey.yaml:5: found "&", expected plain YAML: block or flow mappings and sequences, no anchors, aliases, merges, tags or ? keys, nesting of at most 16`},
	{"second document", "space.good", "survey.yaml", swap("dimension: 3", "---\ndimension: 3\n---"),
		`survey.yaml:5: found a second document, expected plain YAML: block or flow mappings and sequences, no anchors, aliases, merges, tags or ? keys, nesting of at most 16`},
	{"vertical better than perfect", "space.good", "survey.yaml", swap("gravity_aligned: true", "gravity_aligned: true\n    gravity_sigma_rad: -0.1"),
		`survey.yaml:17: key robots[0].gravity_sigma_rad: found -0.1, expected above 0, at most half a turn, of a robot that is gravity_aligned`},
	{"vertical of a robot that knows none", "space.good", "survey.yaml", swap("gravity_aligned: false", "gravity_aligned: false\n    gravity_sigma_rad: 0.1"),
		`survey.yaml:39: key robots[1].gravity_sigma_rad: found 0.1, expected above 0, at most half a turn, of a robot that is gravity_aligned`},
	{"dimension", "space.good", "survey.yaml", swap("dimension: 3", "dimension: 4"),
		`survey.yaml:3: key dimension: found 4, expected 2 or 3`},
	{"no dimension", "space.good", "survey.yaml", swap("dimension: 3", ""),
		`survey.yaml: key dimension: found 0, expected 2 or 3`},
	{"session too large", "space.good", "survey.yaml", swap("[1, 7]", "[1, 4294967296]"),
		`survey.yaml:37: found "cannot unmarshal 4294967296 into Go value of typ" and 21 bytes more, expected a value of the right kind`},
	{"no sessions", "space.good", "survey.yaml", swap("[1, 7]", "[]"),
		`survey.yaml:37: key robots[1].sessions: found 0 sessions, expected 1 to 1024`},
	{"session twice", "space.good", "survey.yaml", swap("[1, 7]", "[7, 7]"),
		`survey.yaml:37: key robots[1].sessions[1]: found 7 a second time, expected each session once`},
	{"robot id", "space.good", "survey.yaml", swap("id: s-2", "id: ../s-2"),
		`survey.yaml:36: key robots[1].id: found "../s-2", expected 1 to 32 letters, digits, _ and -, the first a letter or digit`},
	{"robot id but for case", "space.good", "survey.yaml", swap("id: s-2", "id: Carrier_1"),
		`survey.yaml:36: key robots[1].id: found "Carrier_1" besides "carrier_1", expected each id once, whatever the case of its letters`},
	{"mount kind", "space.good", "survey.yaml", swap("kind: target", "kind: mirror"),
		`survey.yaml:28: key robots[0].mounting[1].kind: found "mirror", expected sensor or target`},
	{"mount turned by half a quaternion", "space.good", "survey.yaml", swap("qw: 1.0", "qw: 0.5"),
		`survey.yaml:26: key robots[0].mounting[0].qw: found a quaternion of norm 0.5, expected 1 within 1e-06`},
	{"grid without level", "space.good", "survey.yaml", swap("level: true", "level: false"),
		`survey.yaml:8: key datum.grid: found a grid for a datum that is not level, expected level: true, or no grid`},
	{"robot without folder", "planar.good", "survey.yaml", swap("robots:", "robots:\n  - {id: r0, sessions: [1]}"),
		"robots/r0/keyframes.csv: found no such file, expected this table, or robots/r0/keyframes.csv.gz\n" +
			"robots/r0/relative.csv: found no such file, expected this table, or robots/r0/relative.csv.gz"},
	{"folder without robot", "planar.good", "survey.yaml", swap("id: r1", "id: r2"),
		"robots/r2/keyframes.csv: found no such file, expected this table, or robots/r2/keyframes.csv.gz\n" +
			"robots/r2/relative.csv: found no such file, expected this table, or robots/r2/relative.csv.gz\n" +
			"robots/r1: found a robot that survey.yaml does not list, expected its id there, or no such folder"},

	// The table as such
	{"no header", "planar.good", "robots/r1/relative.csv", empty,
		`robots/r1/relative.csv:1: found an empty file, expected a header line`},
	{"semicolons", "planar.good", "robots/r1/keyframes.csv", semicolons,
		`robots/r1/keyframes.csv:1: found a line without commas: "session;id;stamp_ns;x_m;y_m;z_m;qx;qy;qz;qw", expected columns divided by commas`},
	{"missing columns", "planar.good", "robots/r1/keyframes.csv", swap("id,stamp_ns", "ID,stamp"),
		"robots/r1/keyframes.csv:1: column id: found no such column, expected it in the header line\n" +
			"robots/r1/keyframes.csv:1: column stamp_ns: found no such column, expected it in the header line"},
	{"column twice", "planar.good", "robots/r1/keyframes.csv", swap("y_m", "x_m"),
		"robots/r1/keyframes.csv:1: column x_m: found it a second time, expected each column once\n" +
			"robots/r1/keyframes.csv:1: column y_m: found no such column, expected it in the header line"},
	{"field missing", "planar.good", "robots/r1/relative.csv", swap("odometry,", ""),
		`robots/r1/relative.csv:2: found 17 fields, expected 18 as in the header line`},
	{"stray quote", "space.good", "ties.csv", swap(`"place matcher`, `"place "matcher`),
		`ties.csv:2: found a quoted field that does not end, or goes on after its quote, expected quotes around the whole field, "" for a quote in it`},

	// Keyframes
	{"NaN", "planar.good", "robots/r1/keyframes.csv", swap("9,,1,2", "9,,1,NaN"),
		`robots/r1/keyframes.csv:3: column y_m: found "NaN", expected a finite decimal number`},
	{"infinite", "planar.good", "robots/r1/keyframes.csv", swap("9,,1,2", "9,,1,1e999"),
		`robots/r1/keyframes.csv:3: column y_m: found "1e999", expected a finite decimal number`},
	{"far away", "planar.good", "robots/r1/keyframes.csv", swap("9,,1,2", "9,,1,-1e10"),
		`robots/r1/keyframes.csv:3: column y_m: found -1e+10, expected at most 1e+09 m either way`},
	{"hexadecimal", "planar.good", "robots/r1/keyframes.csv", swap("9,,1,2", "9,,1,0x2p0"),
		`robots/r1/keyframes.csv:3: column y_m: found "0x2p0", expected a finite decimal number`},
	{"stamp by a spreadsheet", "planar.good", "robots/r1/keyframes.csv", swap("9,,1,2", "9,1.76E+18,1,2"),
		`robots/r1/keyframes.csv:3: column stamp_ns: found "1.76E+18", expected an integer of 64 bits`},
	{"not unit", "planar.good", "robots/r1/keyframes.csv", swap("0.6,0.8", "0.6,0.800002"),
		`robots/r1/keyframes.csv:3: column qx..qw: found a quaternion of norm 1.0000016, expected 1 within 1e-06`},
	{"id twice", "planar.good", "robots/r1/keyframes.csv", swap("0,9,", "0,9,,0,0,0,0,0,0,1\n0,9,"),
		`robots/r1/keyframes.csv:4: column id: found 9 a second time, expected each id once in a session`},
	{"session not listed", "space.good", "robots/s-2/keyframes.csv", swap("\n7,5,", "\n8,6,,0,0,0,0,0,0,1\n7,5,"),
		`robots/s-2/keyframes.csv:3: column session: found 8, expected a session of robot s-2 that survey.yaml lists`},
	{"height in the plane", "planar.good", "robots/r1/keyframes.csv", swap("9,,1,2,0,", "9,,1,2,0.5,"),
		`robots/r1/keyframes.csv:3: column z_m: found 0.5, expected 0 in a survey of dimension 2`},
	{"tilt in the plane", "planar.good", "robots/r1/keyframes.csv", swap("0,0.6,0.8", "0.6,0,0.8"),
		`robots/r1/keyframes.csv:3: column qy: found 0.6, expected 0 in a survey of dimension 2`},
	{"two mistakes in a row", "planar.good", "robots/r1/keyframes.csv", swap("9,,1,2", "9,x,y,2"),
		"robots/r1/keyframes.csv:3: column stamp_ns: found \"x\", expected an integer of 64 bits\n" +
			"robots/r1/keyframes.csv:3: column x_m: found \"y\", expected a finite decimal number"},
	{"id that is none, not blamed on others", "planar.good", "robots/r1/keyframes.csv", swap("0,9,", "0,9.0,"),
		`robots/r1/keyframes.csv:3: column id: found "9.0", expected an integer of 64 bits`},

	// Relative poses
	{"kind", "planar.good", "robots/r1/relative.csv", swap("odometry", "Odometry"),
		`robots/r1/relative.csv:2: column kind: found "Odometry", expected odometry or closure`},
	{"unknown keyframe", "planar.good", "robots/r1/relative.csv", swap("-3,9", "-3,10"),
		`robots/r1/relative.csv:2: column to: found 10, expected a keyframe of robot r1, session 0`},
	{"to itself", "planar.good", "robots/r1/relative.csv", swap("-3,9", "9,9"),
		`robots/r1/relative.csv:2: column to: found 9, the same as in column from, expected another keyframe`},
	{"sigma zero", "planar.good", "robots/r1/relative.csv", swap("0.05,0.05", "0.05,0"),
		`robots/r1/relative.csv:2: column sy_m: found "0", expected a number from 1e-12 to 1e+12, or inf for a component that was not measured`},
	{"sigma negative", "planar.good", "robots/r1/relative.csv", swap("0.05,0.05", "-0.05,0.05"),
		`robots/r1/relative.csv:2: column sx_m: found "-0.05", expected a number from 1e-12 to 1e+12, or inf for a component that was not measured`},
	{"sigma NaN", "planar.good", "robots/r1/relative.csv", swap("0.05,0.05", "nan,0.05"),
		`robots/r1/relative.csv:2: column sx_m: found "nan", expected a number from 1e-12 to 1e+12, or inf for a component that was not measured`},
	{"correlation above one", "planar.good", "robots/r1/relative.csv", swap("0.01,0.5", "0.01,1.5"),
		`robots/r1/relative.csv:2: column c_x_rz: found 1.5, expected a correlation from -1 to 1`},
	{"correlation with what was not measured", "planar.good", "robots/r1/relative.csv", swap("0.01,0.5", "inf,0.5"),
		`robots/r1/relative.csv:2: column c_x_rz: found 0.5, expected 0 where a sigma is inf`},
	{"singular", "planar.good", "robots/r1/relative.csv", swap("0.01,0.5", "0.01,1"),
		`robots/r1/relative.csv:2: column c_x_y..c_ry_rz: found a correlation matrix that is singular (smallest eigenvalue 0, largest 2), expected one that is positive definite`},
	{"not positive semidefinite", "planar.good", "robots/r1/relative.csv", swap("c_x_rz", "c_x_rz,c_x_y,c_y_rz", "0.01,0.5", "0.01,0.9,0.9,-0.9"),
		"robots/r1/relative.csv:2: column c_x_y..c_ry_rz: found a correlation matrix that is not positive semidefinite (smallest eigenvalue -0.8, largest 1.9), expected one that is positive definite"},

	// Ties
	{"tie of another kind", "space.good", "ties.csv", swap("pose,-4", "heading,-4"),
		`ties.csv:3: column kind: found "heading", expected pose, position, range_bearing, range or bearing`},
	{"tie id twice", "space.good", "ties.csv", swap("a.2", "a.1"),
		`ties.csv:3: column id: found "a.1" a second time, expected each id once`},
	{"tie id", "space.good", "ties.csv", swap("a.2", ".2"),
		`ties.csv:3: column id: found ".2", expected 1 to 128 letters, digits, _, - and dots, the first a letter or digit`},
	{"tie to an unknown robot", "space.good", "ties.csv", swap("2,s-2", "2,s-3"),
		`ties.csv:2: column to_robot: found "s-3", expected a robot that survey.yaml lists`},
	{"tie from an unknown keyframe", "space.good", "ties.csv", swap("carrier_1,1,2", "carrier_1,1,3"),
		`ties.csv:2: column from_key: found 3, expected a keyframe of robot carrier_1, session 1`},
	{"tie to an unknown keyframe", "space.good", "ties.csv", swap("s-2,7,5,,pose,0", "s-2,7,6,,pose,0"),
		`ties.csv:4: column to_key: found 6, expected a keyframe of robot s-2, session 7`},
	{"tie to nothing", "space.good", "ties.csv", swap("s-2,7,5,,pose,0", "s-2,7,,,pose,0"),
		`ties.csv:4: column to_key: found "", expected an integer of 64 bits`},
	{"tie to a keyframe and a moment", "space.good", "ties.csv", swap("s-2,7,5,,pose,0", "s-2,7,5,1,pose,0"),
		`ties.csv:4: column to_stamp_ns: found "1" beside a to_key, expected one of the two empty`},
	{"tie within a session", "space.good", "ties.csv", swap("s-2,7,5,,pose,0", "s-2,1,5,,pose,0"),
		`ties.csv:4: column to_session: found both ends in one session, expected two robots or two sessions; what lies within one belongs in its relative.csv`},
	{"unprintable source", "space.good", "ties.csv", swap("place", "pl\x1bce"),
		`ties.csv:2: column source: found "pl\x1bce matcher \"B\", v2", expected one line of printable text, at most 128 bytes, no blank at either end`},

	// Truth
	{"truth twice", "space.good", "truth.csv", swap("s-2,7,,99", "carrier_1,1,1,"),
		`truth.csv:3: column key: found 1 a second time, expected each pose once`},
	{"truth of an unknown keyframe", "space.good", "truth.csv", swap("carrier_1,1,1", "carrier_1,1,4"),
		`truth.csv:2: column key: found 4, expected a keyframe of robot carrier_1, session 1`},
}

func TestBadFolders(t *testing.T) {
	for _, c := range badFolders {
		t.Run(c.name, func(t *testing.T) {
			dir := copyOf(t, c.folder)
			edit(t, dir, c.file, c.change)
			s, err := Read(dir)
			var v *Violations
			if !errors.As(err, &v) || s != nil {
				t.Fatalf("survey %v, error %v; want violations", s, err)
			}
			if err.Error() != c.want {
				t.Errorf("got\n%v\nwant\n%s", err, c.want)
			}
			if n := strings.Count(c.want, "\n") + 1; v.Total != n {
				t.Errorf("%d violations in all, want %d", v.Total, n)
			}
		})
	}
}

// The total is exact where the list is cut, and each file has its own list.
func TestViolationsAreCounted(t *testing.T) {
	dir := copyOf(t, "planar.good")
	rows := strings.Repeat("0,-3,9,odometry,1,2,0,0,0,0.6,0.8,0.05,0.05,inf,inf,inf,-1,0\n", 1000)
	edit(t, dir, "robots/r1/relative.csv", func(s string) string { return s + rows })
	edit(t, dir, "ties.csv", func(s string) string { return s + "a,b\n" })
	_, err := Read(dir)
	var v *Violations
	if !errors.As(err, &v) {
		t.Fatal(err)
	}
	if v.Total != 1001 || len(v.List) != shownPerFile+1 {
		t.Errorf("%d violations, %d shown; want 1001, %d", v.Total, len(v.List), shownPerFile+1)
	}
	lines := strings.Split(err.Error(), "\n")
	if want := "1001 violations in all, 21 shown"; lines[len(lines)-1] != want {
		t.Errorf("last line %q, want %q", lines[len(lines)-1], want)
	}
	if v.List[19].Line != 22 || v.List[20].File != "ties.csv" {
		t.Errorf("list ends with %v and %v", v.List[19], v.List[20])
	}
}

func TestDamagedGzip(t *testing.T) {
	for name, damage := range map[string]func([]byte) []byte{
		"cut":      func(b []byte) []byte { return b[:len(b)-9] },
		"checksum": func(b []byte) []byte { b[len(b)-5] ^= 1; return b },
		"no gzip":  func([]byte) []byte { return []byte("session,id\n") },
		"empty":    func([]byte) []byte { return nil },
	} {
		t.Run(name, func(t *testing.T) {
			dir := copyOf(t, "planar.good")
			text := edit(t, dir, "robots/r1/keyframes.csv", nil)
			path := filepath.Join(dir, "robots/r1/keyframes.csv.gz")
			if err := os.WriteFile(path, damage(gzipped(t, text)), 0o644); err != nil {
				t.Fatal(err)
			}
			_, err := Read(dir)
			if err == nil || !strings.Contains(err.Error(), "keyframes.csv.gz") || !strings.Contains(err.Error(), "expected a complete gzip file") {
				t.Errorf("got %v", err)
			}
			var v *Violations
			if !errors.As(err, &v) || v.Total != 1 {
				t.Errorf("got %v, want one violation", err)
			}
		})
	}
}

func TestPlainAndGzip(t *testing.T) {
	dir := copyOf(t, "planar.good")
	if err := os.WriteFile(filepath.Join(dir, "ties.csv.gz"), gzipped(t, ""), 0o644); err != nil {
		t.Fatal(err)
	}
	_, err := Read(dir)
	if want := "ties.csv: found it and ties.csv.gz, expected one of the two"; err == nil || err.Error() != want {
		t.Errorf("got %v, want %s", err, want)
	}
}

// A small file must not grow without bounds when it is unpacked.
func TestGzipBombs(t *testing.T) {
	const header = "session,id,stamp_ns,x_m,y_m,z_m,qx,qy,qz,qw\n"
	for name, c := range map[string]struct{ text, want string }{
		"line":  {header + strings.Repeat("0", 8<<20), "found a line of more than 32768 bytes, expected shorter lines"},
		"rows":  {header + strings.Repeat(",\n", maxTableRows+1), "4194305 violations in all, 20 shown"},
		"blank": {header + strings.Repeat("\n", maxTableRows+1), ":4194306: found more than 4194304 rows, expected a smaller table"},
	} {
		t.Run(name, func(t *testing.T) {
			dir := copyOf(t, "planar.good")
			edit(t, dir, "robots/r1/keyframes.csv", nil)
			path := filepath.Join(dir, "robots/r1/keyframes.csv.gz")
			if err := os.WriteFile(path, gzipped(t, c.text), 0o644); err != nil {
				t.Fatal(err)
			}
			_, err := Read(dir)
			if err == nil || !strings.HasSuffix(err.Error(), c.want) {
				t.Errorf("got %v, want %s", err, c.want)
			}
		})
	}
}
