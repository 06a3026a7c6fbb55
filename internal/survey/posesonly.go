package survey

import (
	"errors"
	"fmt"
	"slices"
	"strings"
)

// PosesOnly returns an error that counts what agents and coordinator, who know nothing but relative poses, cannot use: ties of other
// kinds and sightings of marks.
func (s *Survey) PosesOnly() error {
	var count [len(kindNames)]int
	for i := range s.Ties {
		count[s.Ties[i].Kind]++
	}
	var found []string
	for k, n := range count {
		if n > 0 && Kind(k) != WholePose {
			found = append(found, fmt.Sprintf("%d %s of kind %s", n, plural(n, "tie is", "ties are"), Kind(k)))
		}
	}
	sightings := 0
	for i := range s.Robots {
		sightings += len(s.Robots[i].Sightings)
	}
	if sightings > 0 {
		found = append(found, fmt.Sprintf("%d %s of marks", sightings, plural(sightings, "row is a sighting", "rows are sightings")))
	}
	if len(found) == 0 {
		return nil
	}
	if n := len(found); n > 1 {
		found = append(slices.Clone(found[:n-2]), found[n-2]+" and "+found[n-1])
	}
	return errors.New("a fleet works with ties of kind pose; " + strings.Join(found, ", "))
}

func plural(n int, one, many string) string {
	if n == 1 {
		return one
	}
	return many
}
