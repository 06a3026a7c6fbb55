package journal

import "testing"

// payload is about what a relative pose takes.
var payload = make([]byte, 150)

func onDisk(b *testing.B) (Folder, *Journal) {
	b.Helper()
	d, err := OS(b.TempDir())
	if err != nil {
		b.Fatal(err)
	}
	j, err := Open(d, owner)
	if err != nil {
		b.Fatal(err)
	}
	return d, j
}

// Appending with one sync for each record, ten, a hundred, a thousand.
func BenchmarkAppend(b *testing.B) {
	for _, c := range []struct {
		name  string
		group int
	}{{"sync=1", 1}, {"sync=10", 10}, {"sync=100", 100}, {"sync=1000", 1000}} {
		b.Run(c.name, func(b *testing.B) {
			_, j := onDisk(b)
			defer j.Close()
			b.ReportAllocs()
			n := 0
			for b.Loop() {
				if _, err := j.Append(1, payload); err != nil {
					b.Fatal(err)
				}
				if n++; n%c.group == 0 {
					if _, err := j.Sync(); err != nil {
						b.Fatal(err)
					}
				}
			}
			b.ReportMetric(float64(n)/b.Elapsed().Seconds(), "records/s")
		})
	}
}

// million makes a journal of a million records.
func million(b *testing.B) Folder {
	b.Helper()
	d, j := onDisk(b)
	for n := range 1_000_000 {
		if _, err := j.Append(1, payload); err != nil {
			b.Fatal(err)
		}
		if n%10_000 == 0 {
			if _, err := j.Sync(); err != nil {
				b.Fatal(err)
			}
		}
	}
	if err := j.Close(); err != nil {
		b.Fatal(err)
	}
	return d
}

func BenchmarkOpenMillion(b *testing.B) {
	d := million(b)
	b.ReportAllocs()
	for b.Loop() {
		j, err := Open(d, owner)
		if err != nil {
			b.Fatal(err)
		}
		if j.Last() != 1_000_000 {
			b.Fatalf("%d records", j.Last())
		}
		j.release()
	}
}

// Reading the last ten of a million.
func BenchmarkFromMillion(b *testing.B) {
	j, err := Open(million(b), owner)
	if err != nil {
		b.Fatal(err)
	}
	defer j.Close()
	for b.Loop() {
		n := 0
		for _, err := range j.From(1_000_000 - 9) {
			if err != nil {
				b.Fatal(err)
			}
			n++
		}
		if n != 10 {
			b.Fatalf("%d records", n)
		}
	}
}
