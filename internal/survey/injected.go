package survey

// Injected tells of one identity that was made wrong on purpose, so that it can be scored who found it. It stands in injected.csv,
// which is written and never read: no fit can come to know of it.
type Injected struct {
	Robot   string // that saw
	Session uint32
	Key     int64
	Tie     string // its id; empty for the sighting of a mark
	Row     int    // of the robot's sightings of marks, from 1; 0 for a tie
	Was     string // robot or mark that was seen
	Named   string // the one it is said to be
}

const injectedName = "injected.csv"

var injectedColumns = []column{{name: "robot"}, {name: "session"}, {name: "keyframe"}, {name: "tie"}, {name: "row"}, {name: "was"}, {name: "named"}}

func encodeInjected(all []Injected) []byte {
	var w csvWriter
	w.header(injectedColumns, func(int) bool { return false })
	for i := range all {
		x := &all[i]
		w.text(x.Robot)
		w.int(int64(x.Session))
		w.int(x.Key)
		w.text(x.Tie)
		w.optional(int64(x.Row), x.Row > 0)
		w.text(x.Was)
		w.text(x.Named)
		w.end()
	}
	return w.b
}
