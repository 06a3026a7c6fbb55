package survey

import (
	"os"
	"path/filepath"
	"reflect"
	"testing"
)

// FuzzRead puts anything in place of one file of a good folder. What Read then
// takes must come back from Write and Read unchanged.
func FuzzRead(f *testing.F) {
	files := []string{"survey.yaml", "robots/carrier_1/keyframes.csv", "robots/carrier_1/relative.csv", "ties.csv", "truth.csv", "ties.csv.gz",
		"ties.csv", "marks.csv", "rulings.csv", "robots/r1/sightings.csv"}
	const sights = 6 // from there on of the folder with sights
	folder := func(i int) string {
		if i < sights {
			return "space.good"
		}
		return "sights.good"
	}
	for i, name := range files {
		if i == 5 {
			continue
		}
		b, err := os.ReadFile(filepath.Join("testdata", folder(i), name))
		if err != nil {
			f.Fatal(err)
		}
		f.Add(uint8(i), b)
		if i == 3 {
			f.Add(uint8(5), gzipped(f, string(b)))
		}
	}
	folders := map[string]string{"space.good": copyOf(f, "space.good"), "sights.good": copyOf(f, "sights.good")}
	out := filepath.Join(f.TempDir(), "out")
	f.Fuzz(func(t *testing.T, which uint8, data []byte) {
		i := int(which) % len(files)
		name, dir := files[i], folders[folder(i)]
		replaced := name
		if name == "ties.csv.gz" {
			replaced = "ties.csv"
		}
		former := edit(t, dir, replaced, nil)
		defer func() {
			os.Remove(filepath.Join(dir, name))
			if err := os.WriteFile(filepath.Join(dir, replaced), []byte(former), 0o644); err != nil {
				t.Fatal(err)
			}
		}()
		if err := os.WriteFile(filepath.Join(dir, name), data, 0o644); err != nil {
			t.Fatal(err)
		}
		s, err := Read(dir)
		if (s == nil) == (err == nil) {
			t.Fatalf("survey %v, error %v", s, err)
		}
		if err != nil {
			return
		}
		for _, m := range s.Ties {
			_, err := m.Cov.Information(3)
			if m.Kind != WholePose {
				_, err = m.Sight.Information(3)
			}
			if err != nil {
				t.Fatalf("tie %s was read, but %v", m.ID, err)
			}
		}
		s.Warnings = nil
		if err := os.RemoveAll(out); err != nil { // its rulings are none of s
			t.Fatal(err)
		}
		if err := Write(out, s); err != nil {
			t.Fatal(err)
		}
		back, err := Read(out)
		if err != nil {
			t.Fatal(err)
		}
		if !sameMeta(&back.Meta, &s.Meta) {
			t.Fatalf("meta data %+v, want %+v", back.Meta, s.Meta)
		}
		back.Meta, back.Warnings = s.Meta, nil
		if !reflect.DeepEqual(back, s) {
			t.Fatalf("got %+v, want %+v", back, s)
		}
	})
}

// FuzzMeta decodes anything as survey.yaml.
func FuzzMeta(f *testing.F) {
	for name := range good {
		b, err := os.ReadFile(filepath.Join("testdata", name, "survey.yaml"))
		if err != nil {
			f.Fatal(err)
		}
		f.Add(b)
	}
	f.Add([]byte("notes: |\n  a\n\n\n---\n"))
	f.Add([]byte("a: &b [*b, {<<: *b}]\n? c\n"))
	f.Fuzz(func(t *testing.T, data []byte) {
		var s sink
		m := decodeMeta(data, &s)
		if s.Total > 0 {
			return
		}
		text, err := encodeMeta(&m)
		if err != nil {
			t.Fatal(err)
		}
		if back := decodeMeta(text, &s); s.Total > 0 || !sameMeta(&back, &m) {
			t.Fatalf("%v: got %+v, want %+v", s.err(), back, m)
		}
	})
}

// FuzzPoseTables reads anything as the relative poses of a pose graph.
func FuzzPoseTables(f *testing.F) {
	f.Add([]byte(goodRelative))
	f.Add([]byte(relativeHead + "3,4,1,0,0,0,0,0.6,0.8,1,0,0,0,0,0,1,0,0,0,0,1,0,0,0,1,0,0.5,1,0,1\n"))
	dir := f.TempDir()
	if err := os.WriteFile(filepath.Join(dir, "keyframes.csv"), []byte(goodKeyframes), 0o644); err != nil {
		f.Fatal(err)
	}
	f.Fuzz(func(t *testing.T, data []byte) {
		if err := os.WriteFile(filepath.Join(dir, "relative.csv"), data, 0o644); err != nil {
			t.Fatal(err)
		}
		s, err := ReadPoseTables(dir)
		if (s == nil) == (err == nil) {
			t.Fatalf("survey %v, error %v", s, err)
		}
		if err != nil {
			return
		}
		for _, m := range s.Robots[0].Relatives {
			if _, err := m.Cov.Information(s.Meta.Dimension); err != nil {
				t.Fatal(err)
			}
		}
	})
}
